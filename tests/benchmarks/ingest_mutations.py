"""Broken observation files from a seeded generator: each must give an Arc or an error of ngbound's
own tree, never another exception, never a hang.

    python -m tests.benchmarks.ingest_mutations [count] [seed] [part parts]

A run can be shared out: part k (from 0) of n takes its share of the count with a stream of its own.

Bytes are flipped, rows cut, doubled and exchanged, columns renamed, encodings broken, numbers
replaced, files truncated, in all formats that are read. Prints the seed, the count, what came out,
and the slowest file. One in ten of the arcs that come out is also vetted, surveyed, written and
read again.
"""

import gzip
import json
import re
import signal
import sys
import tempfile
import time
import traceback
import warnings
from collections import Counter
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np

from ngbound.arc import ADES_COLUMNS, read_arc, survey, vet, write_psv, write_xml
from ngbound.errors import NgboundError, NgboundWarning
from tests.arc.samples import PSV, ROVING, line80

COUNT, SEED = 100_000, 4
LONGEST_S = 20
KINDS = """\
# version=2022
permID|obsID|mode|stn|obsTime|ra|dec|rmsRA|rmsDec|rmsCorr|astCat|mag|rmsMag|band|exp|nStars|remarks
433|a1|CCD|G96|2024-03-01T05:06:07.8Z|10.5|20.5|0.1|0.1|0.2|Gaia2|20.1|0.1|V|30|55|a "b" & <c> é
433|a2|CCD|703|2016-12-31T23:59:60.5Z|359.999|-89.5|0.1|0.1||UNK||||||
permID|trx|rcv|obsTime|delay|rmsDelay|doppler|rmsDoppler|frq|com
433|251|251|2024-03-01T05:06:00Z|12.5|2|||2380|1
433|251|253|2024-03-01T05:06:00Z|||-15.5|0.2|2380|0
permID|mode|stn|obsTime|obsCenter|deltaRA|deltaDec
433|CCD|G96|2024-03-01T05:06:00Z|Jupiter|1.5|-3
permID|mode|stn|sys|ctr|pos1|pos2|pos3|obsTime|raStar|decStar|dist|pa|rmsDist|rmsPA|astCat
433|OCC|275|ICRF_KM|399|1|2|3|2024-03-01T05:06:07.12Z|10.0|0.0|10.0|90.0|0.2|1.0|Gaia3
permID|obsTime|orbProd|orbID|resRA|resDec|selAst|sigRA|sigDec
433|2024-03-01T05:06:07Z|Me|1|1e-2|0.1|A|0.1|0.1
"""
XML = """<?xml version="1.0" encoding="UTF-8"?>
<ades version="2022">
  <obsBlock>
    <obsContext>
      <observatory><mpcCode>G96</mpcCode></observatory><submitter><name>A. N.</name></submitter>
      <measurers><name>A. N.</name></measurers>
      <telescope><design>R</design><aperture>1.5</aperture><detector>CCD</detector></telescope>
      <comment><line>made up</line></comment><fundingSource>nobody</fundingSource>
    </obsContext>
    <obsData>
      <optical><trkSub>ab12</trkSub><mode>CCD</mode><stn>G96</stn>
        <obsTime>2024-03-01T05:06:07.8Z</obsTime><ra>123.4500</ra><dec>-12.34</dec>
        <astCat>Gaia2</astCat><remarks>a &lt; b &amp; c</remarks></optical>
    </obsData>
  </obsBlock>
  <optical><trkSub>ab12</trkSub><mode>CCD</mode><stn>G96</stn>
    <obsTime>2024-03-02T05:06:07Z</obsTime><ra>123.5</ra><dec>-12.34</dec><astCat>UNK</astCat>
  </optical>
</ades>
"""
REPORT80 = "\n".join(
    [
        "COD G96",
        line80(),
        line80(date="2024 03 02.5", ra="12 34.5", dec="-01 23"),
        line80(kind="S", stn="250", date="2024 03 01.123456"),
        "     K24A01B  s2024 03 01.1234561 - 6490.4555 + 2183.2275 +  914.7962        250",
        line80(kind="V", stn="247"),
        "     K24A01B  v2024 03 01.12345 1 123.456789 -12.345678  1234                247",
        "",
    ]
)
JSON80 = json.dumps([{"original_record": line80()}, {"obs80": line80(date="2024 03 02.5")}])
JSON_ADES = json.dumps(
    [
        {
            "permid": "433",
            "stn": "G96",
            "mode": "CCD",
            "obstime": f"2024-03-0{day}T00:00:00.1Z",
            "ra": 10.5,
            "dec": "20.5",
            "astcat": "Gaia2",
            "mag": None,
        }
        for day in (1, 2)
    ]
)
HEADER = (
    PSV.split("permID")[0]
    .removeprefix("# version=2022\n")
    .replace("# measurers", "# observers\n! name B. Nobody\n# measurers")
)
BLOCKS = "# version=2017\n" + "".join(
    f"{HEADER.replace('G96', code) if code != 'I41' else ''}"
    f"permID|{more}mode|stn|obsTime|ra|dec|astCat\n"
    f"433|{'a#b!|' if more else ''}CCD|{code}|2024-03-01T05:06:07.1234567Z|+010.5|-05.5|UNK\n"
    for code, more in (("G96", ""), ("703", "remarks|"), ("F51", ""), ("I41", "remarks|"))
)
XML_KINDS = """<?xml version="1.0" encoding="ISO-8859-1"?>
<ades version="2017"><radar><permID>433</permID><trx>251</trx><rcv>253</rcv>
<obsTime>2024-03-01T05:06:00Z</obsTime><delay>12.5</delay><rmsDelay>2</rmsDelay><com>0</com>
<frq>2380</frq></radar><radar><permID>433</permID><trx>251</trx><rcv>251</rcv>
<obsTime>2024-03-01T05:06:00Z</obsTime><doppler>-15.5</doppler><rmsDoppler>.2</rmsDoppler>
<frq>2380</frq><orbProd>Me</orbProd><orbID>1</orbID><resDoppler>0.1</resDoppler>
<selDoppler>A</selDoppler><sigDoppler>1</sigDoppler></radar>
<offset><permID>433</permID><mode>CCD</mode><stn>G96</stn><obsTime>2024-03-01T05:06:00Z</obsTime>
<obsCenter>Jupiter</obsCenter><dist>1.5</dist><pa>350</pa><rmsDist>0.1</rmsDist></offset>
<occultation><permID>433</permID><stn>275</stn><sys>ITRF</sys><ctr>399</ctr><pos1>012.5</pos1>
<pos2>5000.1</pos2><pos3>3800.2</pos3><obsTime>2024-03-01T05:06:07.12Z</obsTime>
<raStar>10.0</raStar><decStar>-0.0</decStar><deltaRA>0</deltaRA><deltaDec>0</deltaDec>
<rmsRA>0.001</rmsRA><rmsDec>0.001</rmsDec><astCat>Gaia3</astCat></occultation>
<opticalResidual><permID>433</permID><obsTime>2024-03-01T05:06:00Z</obsTime><orbProd>Me</orbProd>
<orbID>1</orbID></opticalResidual></ades>
"""
ECHO80 = f"{'00433':14s}%s{'2000 01 21.500000':17s}"
RADAR80 = "\n".join(
    [
        line80(kind="c", note="&", desig="00433"),
        line80(desig="00433", kind="O", ra="J   +12.3", dec="-4.5"),
        f"{ECHO80 % 'R'}  1234567891234{'':15s} 2380 253{'':6s}253",
        f"{ECHO80 % 'r'}S{'1250':>10s}{'':34s}253",
        f"{ECHO80 % 'R'}{'':15s}+    148301{'':4s} 2380 251 JPLRS251",
        f"{ECHO80 % 'r'}C{'':14s}{'1':>11s}{'000':4s}{'':15s}251",
        line80(desig="00433", disc="*", kind="X", date="1898 08 13.9", mag="", band=" "),
        "",
    ]
)
JSON_KINDS = json.dumps(
    {
        "data": [
            {"permID": "433", "stn": "XYZ", "mode": "CCD", "obsTime": "2024-03-01T00:00:00Z"}
            | {"ra": 359.9999999, "dec": -0.5, "astCat": "UNK", "sys": "ICRF_AU", "ctr": 399}
            | {"pos1": 0.1, "pos2": -0.2, "pos3": 1e-05, "notes": "K", "rmsRA": 0.1, "rmsDec": 0.1},
            {"permID": "433", "trx": "251", "rcv": "251", "obsTime": "2024-03-02T00:00:00Z"}
            | {"delay": 12.5, "rmsDelay": 2, "frq": 2380.0, "com": True},
        ]
    }
)
SEEDS = [t.encode() for t in (PSV, ROVING, KINDS, XML, REPORT80, JSON80, JSON_ADES)]
SEEDS += [t.encode() for t in (BLOCKS, XML_KINDS, RADAR80, JSON_KINDS)]
NUMBERS = (
    "NaN",
    "-0",
    "1e999",
    "9" * 400,
    "0x10",
    "-inf",
    "1_0",
    "٣",
    "",
    ".",
    "-",
    "1e-400",
    "null",
)
NUMBERS += ("00000", "360", "-90.0000001", "1.7976931348623157e308", "12 34 56.7", "2**63", "True")
NAMES = (*ADES_COLUMNS, "RA", "Dec", "observation", "", " ", "stn ", "ra|ra", "x" * 300, "é")
ODD = (
    "\x00",
    "\x1a",
    "\ufeff",
    "\u2028",
    "\x85",
    "\xa0",
    "\ud800",
    "|",
    "||||",
    "#",
    "!",
    "<",
    "&a;",
)
ODD += (
    "]]>",
    "<!--",
    "<!DOCTYPE x [",
    '"',
    "\\",
    "\r",
    "\t",
    " " * 3000,
    "(" * 2000,
    "{",
    "[" * 5000,
)


def flip(content: bytes, rng: np.random.Generator) -> bytes:
    """Some bytes replaced."""
    made = bytearray(content)
    for at in rng.integers(0, max(len(made), 1), int(rng.integers(1, 8))):
        if len(made):
            made[at] = int(rng.integers(0, 256))
    return bytes(made)


def rows(content: bytes, rng: np.random.Generator) -> bytes:
    """Rows cut, doubled, exchanged or halved."""
    lines = content.split(b"\n")
    for _ in range(int(rng.integers(1, 4))):
        i, j = rng.integers(0, len(lines), 2)
        choice = rng.integers(0, 5)
        if choice == 0 and len(lines) > 1:
            del lines[i]
        elif choice == 1:
            lines.insert(j, lines[i])
        elif choice == 2:
            lines[i], lines[j] = lines[j], lines[i]
        elif choice == 3:
            lines[i] = lines[i][: int(rng.integers(0, len(lines[i]) + 1))]
        else:
            lines[i] = lines[i] + lines[j]
    return b"\n".join(lines)


def columns(content: bytes, rng: np.random.Generator) -> bytes:
    """A column, an element or a key renamed."""
    names = [n for n in ADES_COLUMNS if n.encode() in content] or ["original_record"]
    old = names[int(rng.integers(0, len(names)))].encode()
    new = NAMES[int(rng.integers(0, len(NAMES)))].encode()
    return content.replace(old, new, int(rng.integers(-1, 3)))


def encoding(content: bytes, rng: np.random.Generator) -> bytes:
    """The encoding broken."""
    text = content.decode("utf-8", "replace")
    choice = int(rng.integers(0, 7))
    if choice < 4:
        code = ("utf-16", "utf-32", "latin-1", "cp500")[choice]
        return text.encode(code, "replace")
    if choice == 4:
        return b"\xef\xbb\xbf" + content
    at = int(rng.integers(0, len(content) + 1))
    if choice == 5:
        return content[:at] + b"\xc3" + content[at:]
    return content[:at] + bytes(rng.integers(128, 256, 3).astype(np.uint8)) + content[at:]


def numbers(content: bytes, rng: np.random.Generator) -> bytes:
    """A number replaced."""
    found = list(re.finditer(rb"-?\d+\.?\d*", content))
    if not found:
        return content
    hit = found[int(rng.integers(0, len(found)))]
    new = NUMBERS[int(rng.integers(0, len(NUMBERS)))].encode()
    return content[: hit.start()] + new + content[hit.end() :]


def insert(content: bytes, rng: np.random.Generator) -> bytes:
    """Something odd put in."""
    at = int(rng.integers(0, len(content) + 1))
    new = ODD[int(rng.integers(0, len(ODD)))].encode("utf-8", "surrogatepass")
    return content[:at] + new + content[at:]


def cut(content: bytes, rng: np.random.Generator) -> bytes:
    """The file truncated at either end."""
    at = int(rng.integers(0, len(content) + 1))
    return content[:at] if rng.integers(0, 2) else content[at:]


def line_ends(content: bytes, rng: np.random.Generator) -> bytes:
    """Other line ends."""
    return content.replace(b"\n", (b"\r\n", b"\r", b"\n\n", b"")[int(rng.integers(0, 4))])


def zipped(content: bytes, rng: np.random.Generator) -> bytes:
    """A gzip file, whole or broken."""
    packed = gzip.compress(content, mtime=0)
    return flip(packed, rng) if rng.integers(0, 2) else packed[: int(rng.integers(2, len(packed)))]


MUTATIONS: tuple[Callable[[bytes, np.random.Generator], bytes], ...] = (
    *(flip, rows, columns, encoding, numbers, insert, cut, line_ends, zipped),
)


def mutated(rng: np.random.Generator) -> bytes:
    """One broken file."""
    content = SEEDS[int(rng.integers(0, len(SEEDS)))]
    for _ in range(int(rng.integers(1, 4))):
        content = MUTATIONS[int(rng.integers(0, len(MUTATIONS)))](content, rng)
    return content


def outcome(path: Path, folder: Path, more: bool) -> str:
    """ "arc", or the name of our own error; any other exception goes through."""
    try:
        arc = read_arc(path)
    except NgboundError as error:
        if not str(error).strip().endswith((".", "?")):
            raise AssertionError(f"not a sentence: {error}") from error
        return type(error).__name__
    if len(arc) < 1:
        raise AssertionError("an arc without observations")
    if not more:
        return "arc"
    str(arc), arc.used, [str(f) for f in vet(arc)], json.dumps(survey(arc).to_dict())
    for write, name in ((write_psv, "again.psv"), (write_xml, "again.xml")):
        try:
            write(arc, folder / name)
        except NgboundError:
            return "arc (not to be written)"
        read_arc(folder / name)
    return "arc"


def too_long(*_: Any) -> None:
    """What the alarm does."""
    raise TimeoutError(f"more than {LONGEST_S} s on one file")


def run(
    count: int, seed: int, report: bool = False, part: int = 0
) -> tuple[Counter[str], list[str], float]:
    """Outcomes, the faults found (trace and content), and the slowest file in s."""
    rng = np.random.default_rng([seed, part])
    told: Counter[str] = Counter()
    faults: list[str] = []
    slowest = 0.0
    signal.signal(signal.SIGALRM, too_long)
    with tempfile.TemporaryDirectory() as name, warnings.catch_warnings():
        warnings.simplefilter("error")
        warnings.simplefilter("ignore", NgboundWarning)
        folder = Path(name)
        path = folder / "broken"
        for i in range(count):
            content = mutated(rng)
            path.write_bytes(content)
            start = time.perf_counter()
            signal.alarm(LONGEST_S)
            try:
                told[outcome(path, folder, told["arc"] % 10 == 0)] += 1
            except Exception as error:
                told[f"FAULT {type(error).__name__}"] += 1
                faults.append(f"file {i}: {traceback.format_exc()}\n{content[:3000]!r}")
            finally:
                signal.alarm(0)
            slowest = max(slowest, time.perf_counter() - start)
            if report and faults and len(faults) <= 30:
                print(faults.pop(), flush=True)
            if report and i % 2500 == 2499:
                print(f"part {part}: {i + 1} files", flush=True)
    return told, faults, slowest


def main() -> None:
    """The full run."""
    count = int(sys.argv[1]) if len(sys.argv) > 1 else COUNT
    seed = int(sys.argv[2]) if len(sys.argv) > 2 else SEED
    part, parts = (int(sys.argv[3]), int(sys.argv[4])) if len(sys.argv) > 4 else (0, 1)
    start = time.perf_counter()
    count = count * (part + 1) // parts - count * part // parts
    told, _, slowest = run(count, seed, report=True, part=part)
    took = time.perf_counter() - start
    share = f"seed {seed}, part {part} of {parts}, {count} files"
    print(f"{share} in {took:.0f} s, the slowest {slowest:.2f} s")
    for name, number in told.most_common():
        print(f"{number:7d} {name}")


if __name__ == "__main__":
    main()
