"""Invented observations for the tests of this room (no real object; positions made up)."""

from pathlib import Path

import numpy as np
import pandas as pd

PSV = """\
# version=2022
# observatory
! mpcCode G96
! name Invented Ridge
# submitter
! name A. Nobody
# measurers
! name A. Nobody
# telescope
! aperture 1.5
! design Reflector
! detector CCD
permID |trkSub|mode|stn|obsTime                |ra        |dec       |rmsRA|rmsDec|astCat|mag |band
654321 |      |CCD |G96|2024-03-01T05:06:07.8Z |123.450100|-12.345600|0.20 |0.25  |Gaia2 |20.1|V
654321 |abc12 |CCD |G96|2024-03-01T05:26:07.80Z|123.46010 |-12.34570 |0.20 |0.25  |Gaia2 |20.2|V
654321 |      |CCD |703|2024-03-02T05:06:07Z   |123.95010 |-12.39560 |     |      |UNK   |    |
"""

ROVING = """\
# version=2022
provID|mode|stn|sys|ctr|pos1|pos2|pos3|obsTime|ra|dec|astCat
2024 AB1|CCD|247|WGS84|399|12.5|-45.25|1200|2024-03-01T05:06:07Z|10.5|20.5|Gaia2
2024 AB1|CCD|247|WGS84|399|100.5|-45.25|1200|2024-03-01T06:06:07Z|10.5|20.5|Gaia2
2024 AB1|CCD|250|ICRF_KM|399|6800.5|-45.25|120|2024-03-02T05:06:07Z|10.6|20.5|Gaia2
2024 AB1|CCD|250||||||2024-03-02T05:06:07Z|10.6|20.5|Gaia2
"""


def line80(
    desig: str = "     K24A01B",
    disc: str = " ",
    note: str = " ",
    kind: str = "C",
    date: str = "2024 03 01.12345",
    ra: str = "12 34 56.78",
    dec: str = "-01 23 45.6",
    mag: str = "20.1",
    band: str = "V",
    cat: str = "V",
    ref: str = "",
    stn: str = "G96",
) -> str:
    """One 80-column record, every field in its columns."""
    text = (
        f"{desig:12s}{disc}{note}{kind}{date:<17s}{ra:<12s}{dec:<12s}{'':9s}{mag:>4s} {band}{cat}"
    )
    text += f"{ref:5s}{stn:3s}"
    assert len(text) == 80, len(text)
    return text


def frame(n: int = 6, stn: str = "G96", seed: int = 1, **columns: object) -> pd.DataFrame:
    """A data frame in ADES columns: n observations, one every 20 min, three a night."""
    rng = np.random.default_rng(seed)
    t0 = np.datetime64("2024-03-01T03:00:00")
    minutes = 20 * (np.arange(n) % 3) + 1440 * (np.arange(n) // 3)
    days = minutes / 1440.0
    made = pd.DataFrame(
        {
            "permID": "654321",
            "mode": "CCD",
            "stn": stn,
            "obsTime": [str(t0 + np.timedelta64(int(m), "m")) + "Z" for m in minutes],
            "ra": 120.0 + 0.2 * days + rng.normal(0.0, 1e-5, n),
            "dec": 10.0 + 0.1 * days,
            "astCat": "Gaia2",
        }
    )
    for name, value in columns.items():
        made[name] = value
    return made


def put(folder: Path, name: str, text: str | bytes) -> Path:
    """A file with this content."""
    path = folder / name
    path.write_bytes(text.encode("utf-8") if isinstance(text, str) else text)
    return path
