"""What ADES allows in each column: record kinds, lexical form, range and unit; imports only the
standard library.

Source: A Concise Description of ADES, version 2022 (IAU-ADES repository, 2 May 2024), tables 3 to
17, and the element types of its schema; for version 2017 what the archived schema of that version
(past_versions/v2017) has otherwise. Order of the columns is the order that the standard prescribes
for XML.
"""

import re
from dataclasses import dataclass, replace
from math import inf

OPTICAL, OFFSET, OCCULTATION, RADAR = "optical", "offset", "occultation", "radar"
OPTICAL_RESIDUAL, RADAR_RESIDUAL = "opticalResidual", "radarResidual"
RECORD_KINDS = (OPTICAL, OFFSET, OCCULTATION, RADAR, OPTICAL_RESIDUAL, RADAR_RESIDUAL)
VERSIONS = ("2017", "2022")
_LETTER = dict(zip("OFCRor", RECORD_KINDS, strict=True))

REQUIRED = {
    OPTICAL: ("mode", "stn", "obsTime", "ra", "dec", "astCat"),
    OFFSET: ("mode", "stn", "obsTime", "obsCenter"),
    OCCULTATION: ("mode", "stn", "obsTime", "raStar", "decStar", "astCat"),
    RADAR: ("trx", "rcv", "obsTime", "frq"),
    OPTICAL_RESIDUAL: ("obsTime",),
    RADAR_RESIDUAL: ("obsTime",),
}
"""Columns that every record of a kind must fill (an identification comes on top). In version 2017
an occultation may do without mode."""


@dataclass(frozen=True)
class ColumnRule:
    """One ADES column.

    ``form`` is "text", "time", "decimal", "double" or "integer"; ``pattern`` holds for text;
    ``low``/``high`` bound numbers and are themselves excluded where ``open_low``/``open_high``.
    The rest are lexical rules: ``width`` is the longest form without a sign,
    ``places`` the most decimals, ``signed`` whether a sign may stand, ``bare_point`` whether the
    digit before the point may be left out, ``zeros`` whether leading zeros may stand, ``values``
    the only values allowed (any, when empty), ``inside`` that the bounds themselves are excluded.
    """

    name: str
    kinds: frozenset[str]
    form: str
    unit: str = ""
    pattern: str = ""
    width: int = 0
    low: float = -inf
    high: float = inf
    open_low: bool = False
    open_high: bool = False
    signed: bool = True
    places: int = 99
    bare_point: bool = False
    zeros: bool = False
    inside: bool = False
    values: tuple[float, ...] = ()

    @property
    def words(self) -> str:
        """The rule as the end of a sentence."""
        if self.form == "text":
            return _TEXT_WORDS.get(self.name, f"it must match {self.pattern}")
        what = {"integer": "a whole number", "double": "a number"}.get(
            self.form, "a decimal number"
        )
        unit = f" in {self.unit}" if self.unit else ""
        span = ""
        if self.high < inf:
            left = "(" if self.open_low else "["
            right = ")" if self.open_high else "]"
            span = f" in the range {left}{self.low:g}, {self.high:g}{right}"
        elif self.low > -inf:
            span = f" {'above' if self.open_low else 'of at least'} {self.low:g}"
        if self.values:
            span = ", one of " + ", ".join(f"{value:g}" for value in self.values)
        return f"it must be {what}{unit}{span}"


_PLANETS = "Mercury|Venus|Earth|Moon|Mars|Jupiter|Saturn|Uranus|Neptune"
_PERM = (
    r"(?=.{1,25}\Z)(?:\d+([IPD](-[A-Z]{1,2})?)?|(Mars|Jupiter|Saturn|Uranus|Neptune) \d{1,3}"
    r"|\(\d+\) \d{1,3})"
)
_PROV = (
    r"(?=.{1,25}\Z)(?:\d{4} [A-HJ-Y][A-HJ-Z]\d*|\d{4} (P-L|T-[123])|A[89]\d{2} [A-HJ-Y][A-HJ-Z]"
    r"|[ADCPX]/\d{4} [A-Z]{1,2}\d*(-[A-Z])?"
    r"|S/\d{4} ([MJSUN]|\((\d+|\d{4} [A-HJ-Y][A-HJ-Z]?\d+)\)) \d+)"
)
_TEXT_WORDS = {
    "permID": "it must be an unpacked designation such as 433, 73P, 73P-C, 1I or Jupiter 13",
    "provID": "it must be an unpacked designation such as 2014 AA360, C/1999 K7 or 2040 P-L",
    "trkSub": "it must have 1 to 8 letters, digits, _ or -",
    "stn": "it must be an observatory code of 3 or 4 letters or digits",
    "trx": "it must be an observatory code of 3 or 4 letters or digits",
    "rcv": "it must be an observatory code of 3 or 4 letters or digits",
    "mode": "it must be a code of at most 3 letters such as CCD, CMO, PHO, VID, OCC or UNK",
    "astCat": "it must be a catalogue name of at most 8 characters such as Gaia2, UCAC4 or UNK",
    "sys": "it must be WGS84, ITRF, IAU, ICRF_AU or ICRF_KM",
    "disc": "it must be * or +",
    "obsCenter": "it must be a planet, Moon, or an unpacked designation such as 433 or Jupiter 3",
    "deprecated": "it must be X",
    "band": "it must be a band of at most 3 letters or digits",
}

PREC_TIME = (1.0, 10.0, 69.0, 100.0, 694.0, 1000.0, 4167.0, 10000.0, 41667.0, 100000.0)
PREC_ANGLE = (0.001, 0.01, 0.1, 0.6, 1.0, 6.0, 60.0)
"""Values that precTime (1e-6 d) and precRA (s of time), precDec (arcsec) may take."""
_VALUES = {"time": PREC_TIME, "angle": PREC_ANGLE, "399": (399.0,)}

# name | kinds (O optical F offset C occultation R radar o, r their residuals) | form | more
_TABLE = rf"""
permID OFCRor text pattern={_PERM}
provID OFCRor text pattern={_PROV}
artSat OFCRor text pattern=.{{1,25}}
trkSub OFCRor text pattern=[- ?+@./()\\A-Za-z0-9_]{{1,8}}
obsID OFCRor text pattern=[A-Za-z0-9_]{{1,25}}
obsSubID OFCo text pattern=.{{1,35}}
trkID OFCo text pattern=[-A-Za-z0-9_]{{1,12}}
trkMPC OFCo text pattern=[-A-Za-z0-9_]{{1,12}}
mode OFC text pattern=[A-Za-z0-9_]{{1,3}}
stn OFC text pattern=[A-Za-z0-9_]{{3,4}}
trx R text pattern=[A-Za-z0-9_]{{3,4}}
rcv R text pattern=[A-Za-z0-9_]{{3,4}}
sys OFC text pattern=WGS84|ITRF|IAU|ICRF_AU|ICRF_KM
ctr OFC integer low=-999999999 high=999999999 values=399
pos1 OFC decimal width=13
pos2 OFC decimal width=13
pos3 OFC decimal width=13
vel1 OFC decimal width=13
vel2 OFC decimal width=13
vel3 OFC decimal width=13
posCov11 OFC double width=20
posCov12 OFC double width=20
posCov13 OFC double width=20
posCov22 OFC double width=20
posCov23 OFC double width=20
posCov33 OFC double width=20
prog OFCR text pattern=[A-Za-z0-9_]{{1,2}}
obsTime OFCRor time
rmsTime OFC positive unit=s width=8
ra O decimal unit=deg low=0 high=360 open_high signed=no places=9 bare_point
dec O decimal unit=deg low=-90 high=90 places=9 bare_point
raStar C decimal unit=deg low=0 high=360 open_high signed=no places=9 bare_point
decStar C decimal unit=deg low=-90 high=90 places=9 bare_point
obsCenter F text pattern={_PLANETS}|{_PERM}|{_PROV}
deltaRA FC decimal unit=arcsec width=9
deltaDec FC decimal unit=arcsec width=9
dist FC positive unit=arcsec width=10
pa FC decimal unit=deg low=0 high=360 open_high signed=no places=9 bare_point
rmsRA OFC positive unit=arcsec width=7
rmsDec OFC positive unit=arcsec width=7
rmsDist FC positive unit=arcsec width=6
rmsPA FC positive unit=deg width=6
rmsCorr OFC decimal low=-1 high=1 places=11 inside
delay R positive unit=s width=14
rmsDelay R positive unit=microseconds width=6
doppler R decimal unit=Hz width=13
rmsDoppler R positive unit=Hz width=6
astCat OC text pattern=[.A-Za-z0-9_]{{1,8}}
mag OFC decimal unit=mag low=-5 high=35 width=7
rmsMag OFC positive unit=mag width=6
band OFC text pattern=[A-Za-z0-9_]{{1,3}}
fltr OFC text pattern=[A-Za-z0-9_]{{1,3}}
photCat OFC text pattern=[.A-Za-z0-9_]{{1,8}}
photAp OFC positive unit=arcsec width=6
nucMag OFC integer low=0 high=1
logSNR OFCR decimal width=5
shapeOcc C integer low=0 high=1
seeing OFC positive unit=arcsec width=6
exp OF positive unit=s width=6
rmsFit OF positive unit=arcsec width=6
nStars OF integer low=1 high=999999
com R integer low=0 high=1
frq R positive unit=MHz width=16 high=inf bare_point zeros
ref OFCR text pattern=.{{1,28}}
disc OFC text pattern=[*+]
subFrm OFC text pattern=[BJ]\d{{4}}.0|APP\.
subFmt OFC text pattern=[A-Za-z0-9_]{{1,4}}
precTime OFC decimal unit=1e-6_d low=1 high=100000 bare_point zeros values=time
precRA OFC decimal unit=seconds_of_time low=0.001 high=60 bare_point zeros values=angle
precDec OFC decimal unit=arcsec low=0.001 high=60 bare_point zeros values=angle
uncTime OFC positive unit=s width=8
notes OFC text pattern=[A-Za-z0-9_]{{1,6}}
remarks OFCR text pattern=.{{1,300}}
orbProd OFCRor text pattern=.{{1,100}}
orbID OFCRor text pattern=.{{1,25}}
resRA OFCo double unit=arcsec width=6
resDec OFCo double unit=arcsec width=6
selAst OFCo text pattern=[AaDd]
sigRA OFCo positive unit=arcsec width=7
sigDec OFCo positive unit=arcsec width=7
sigCorr OFCo decimal low=-1 high=1 places=11 inside
sigTime OFCo positive unit=s width=8
biasRA OFCo decimal unit=arcsec width=7
biasDec OFCo decimal unit=arcsec width=7
biasTime OFCo decimal unit=s width=9
photProd OFCo text pattern=.{{1,100}}
resMag OFCo double unit=mag width=6
selPhot OFCo text pattern=[AaDd]
sigMag OFCo positive unit=mag width=6
biasMag OFCo decimal unit=mag width=5
photMod OFCo text pattern=[A-Za-z0-9_]{{1,8}}
deprecated OFC text pattern=X
resDelay Rr double unit=microseconds width=6
selDelay Rr text pattern=[AaDd]
sigDelay Rr positive unit=microseconds width=6
resDoppler Rr double unit=Hz width=6
selDoppler Rr text pattern=[AaDd]
sigDoppler Rr positive unit=Hz width=6
"""


def _parse(line: str) -> ColumnRule:
    name, letters, form, *rest = line.split(" ", 3)
    more = rest[0] if rest else ""
    kinds = frozenset(_LETTER[c] for c in letters)
    if more.startswith("pattern="):
        return ColumnRule(name, kinds, form, pattern=more.removeprefix("pattern="))
    options = {}
    for item in more.split():
        key, _, value = item.partition("=")
        options[key] = value or "yes"
    positive = form == "positive"
    return ColumnRule(
        name=name,
        kinds=kinds,
        form="decimal" if positive else form,
        unit=options.get("unit", "").replace("_", " "),
        width=int(options.get("width", 0)),
        low=float(options.get("low", 0.0 if positive else "-inf")),
        high=float(options.get("high", 1e5 if positive else "inf")),
        open_low=positive,
        open_high=positive or "open_high" in options,
        signed=not positive and options.get("signed") != "no",
        places=int(options.get("places", 99)),
        bare_point="bare_point" in options,
        zeros="zeros" in options or form == "integer",
        inside="inside" in options,
        values=_VALUES.get(options.get("values", ""), ()),
    )


COLUMNS: dict[str, ColumnRule] = {
    rule.name: rule for rule in (_parse(line) for line in _TABLE.strip().splitlines())
}
"""All ADES columns but localUse, in the order of the standard."""

TEXT_COLUMNS = tuple(c for c, rule in COLUMNS.items() if rule.form in ("text", "time"))
NUMBER_COLUMNS = tuple(c for c, rule in COLUMNS.items() if rule.form not in ("text", "time"))

NEW_IN_2022 = ("obsSubID", "trkMPC", "shapeOcc", "fltr", "vel1", "vel2", "vel3")
"""Columns that version 2017 does not have."""
_TEXT_2017 = {
    "permID": _PERM.removeprefix(r"(?=.{1,25}\Z)"),
    "ref": ".{1,16}",
    **dict.fromkeys(("artSat", "orbProd", "orbID", "photProd"), ".+"),
}
_UNBOUNDED_2017 = ("ctr", "mag")


def _of_2017(rule: ColumnRule) -> ColumnRule:
    """What version 2017 asks of a column: numbers in any spelling of a decimal, without limits of
    digits, and exponents nowhere."""
    if rule.form in ("text", "time"):
        return replace(rule, pattern=_TEXT_2017.get(rule.name, rule.pattern))
    unbounded = rule.name in _UNBOUNDED_2017
    no_end = unbounded or rule.name == "nStars" or rule.open_low
    return replace(
        rule,
        form="integer" if rule.form == "integer" else "decimal",
        width=0,
        low=-inf if unbounded else rule.low,
        high=inf if no_end else rule.high,
        open_high=rule.open_high and not no_end,
        signed=True,
        places=99,
        bare_point=True,
        zeros=True,
        inside=False,
        values=() if unbounded else rule.values,
    )


RULES: dict[str, dict[str, ColumnRule]] = {
    "2017": {c: _of_2017(rule) for c, rule in COLUMNS.items() if c not in NEW_IN_2022},
    "2022": COLUMNS,
}
"""The columns of each version."""


def required_columns(kind: str, version: str) -> tuple[str, ...]:
    """Columns that every record of a kind must fill in a version ("" where none was declared)."""
    needed = REQUIRED[kind]
    free = kind == OCCULTATION and version == "2017"
    return tuple(c for c in needed if not (free and c == "mode"))


_LOCATION = ("sys", "ctr", "pos1", "pos2", "pos3")
_ASTROMETRY = ("resRA", "resDec", "selAst", "sigRA", "sigDec")
_PHOTOMETRY = ("resMag", "selPhot", "sigMag")
_DELAY = ("resDelay", "selDelay", "sigDelay")
_DOPPLER = ("resDoppler", "selDoppler", "sigDoppler")

TOGETHER: tuple[tuple[tuple[str, ...], tuple[str, ...]], ...] = (
    (
        (
            *_LOCATION,
            *("vel1", "vel2", "vel3"),
            *("posCov11", "posCov12", "posCov13", "posCov22", "posCov23", "posCov33"),
        ),
        _LOCATION,
    ),
    (("mag", "rmsMag", "band", "fltr", "photCat", "photAp", "nucMag"), ("mag", "band")),
    (("precTime", "precRA", "precDec"), ("precTime", "precRA", "precDec")),
    (("deltaRA", "deltaDec"), ("deltaRA", "deltaDec")),
    (("dist", "pa", "rmsDist", "rmsPA"), ("dist", "pa")),
    (
        (*_ASTROMETRY, "sigCorr", "sigTime", "biasRA", "biasDec", "biasTime"),
        _ASTROMETRY,
    ),
    (("photProd", *_PHOTOMETRY, "biasMag", "photMod"), _PHOTOMETRY),
    (_DELAY, _DELAY),
    (_DOPPLER, _DOPPLER),
    (("orbProd", "orbID", *_ASTROMETRY, *_PHOTOMETRY, *_DELAY, *_DOPPLER), ("orbProd", "orbID")),
    (("rmsDelay",), ("delay",)),
    (("rmsDoppler",), ("doppler",)),
)
"""Where one of the first columns is filled, all of the second must be."""

CONTEXT_ELEMENTS: dict[str, tuple[str, ...]] = {
    "observatory": ("mpcCode", "name"),
    "submitter": ("name", "institution"),
    "observers": ("name",),
    "measurers": ("name",),
    "telescope": (
        "name",
        "design",
        "aperture",
        "detector",
        "fRatio",
        "filter",
        "arraySize",
        "pixelScale",
    ),
    "software": ("astrometry", "fitOrder", "photometry", "objectDetection"),
    "coinvestigators": ("name",),
    "collaborators": ("name",),
    "fundingSource": (),
    "comment": ("line",),
}
"""Elements of obsContext and the children that each may have."""

CONTEXT_REQUIRED: dict[str, tuple[str, ...]] = {
    "observatory": ("mpcCode",),
    "submitter": ("name",),
    "measurers": ("name",),
    "telescope": ("design", "aperture", "detector"),
    "observers": ("name",),
    "coinvestigators": ("name",),
    "collaborators": ("name",),
    "comment": ("line",),
}
"""Children that an element of obsContext must have."""
CONTEXT_ALWAYS = {
    "2017": ("observatory", "submitter", "observers", "measurers", "telescope"),
    "2022": ("observatory", "submitter", "measurers", "telescope"),
}
"""Elements that every obsContext must have, by version."""
CONTEXT_REPEATED = ("observers", "measurers", "coinvestigators", "collaborators", "comment")
"""Elements whose child may be repeated."""
_CONTEXT_WIDTH = {
    ("telescope", "design"): 35,
    ("telescope", "detector"): 25,
    ("telescope", "filter"): 25,
    ("telescope", "arraySize"): 25,
    ("software", "fitOrder"): 25,
}
_CONTEXT_WIDTH_ELSEWHERE = 100
_DECIMAL = r"[+-]?([0-9]+(\.[0-9]*)?|\.[0-9]+)"
_CONTEXT_NUMBERS = (("telescope", "aperture"), ("telescope", "fRatio"), ("telescope", "pixelScale"))


def context_value_problem(name: str, child: str, text: str, version: str) -> str:
    """What a version has against the text of an element of obsContext ("" for ``child`` when it is
    the element's own text); "" when nothing."""
    limited = version == "2022"
    if not text.strip():
        return "it is empty"
    if (name, child) == ("observatory", "mpcCode"):
        return "" if matches(COLUMNS["stn"], text) else _TEXT_WORDS["stn"]
    if (name, child) in _CONTEXT_NUMBERS:
        form = r"(?=.{1,6}\Z)(0|[1-9][0-9]*)(\.[0-9]*)?" if limited else _DECIMAL
        good = re.fullmatch(form, text)
        if good is None or not 0.0 < float(text) < (1e5 if limited else inf):
            most = " of at most 6 characters" if limited else ""
            return f"it must be a positive decimal number{most}"
        return ""
    width = _CONTEXT_WIDTH.get((name, child), _CONTEXT_WIDTH_ELSEWHERE)
    if "|" in text or limited and len(text) > width:
        most = f" of at most {width} characters" if limited else ""
        return f"it must be a text{most} without '|'"
    return ""


def context_problem(
    context: tuple[tuple[str, str, tuple[tuple[str, str], ...]], ...],
    version: str,
) -> tuple[int, str, str, str] | None:
    """The first thing that a version has against an obsContext.

    Returns
    -------
    (position, name, value, sentence) or None
        Position of the element in the context (0 when one is missing), the name of what is wrong,
        its text, and the problem with its remedy.
    """
    seen: set[str] = set()
    for at, (name, text, children) in enumerate(context):
        if name in seen:
            return at, name, "", "it stands twice in one header. Keep one of them"
        seen.add(name)
        if name == "fundingSource":
            problem = context_value_problem(name, "", text, version)
            if problem:
                return at, name, text, f"{problem}. Correct the text"
        names = [child for child, _ in children]
        for child in CONTEXT_REQUIRED.get(name, ()):
            if child not in names:
                return at, name, "", f"it has no {child}, which the standard asks for. Add it"
        for child, value in children:
            if names.count(child) > 1 and name not in CONTEXT_REPEATED:
                return at, f"{name}/{child}", value, "it stands twice. Keep one of them"
            problem = context_value_problem(name, child, value, version)
            if problem:
                return (
                    at,
                    f"{name}/{child}",
                    value,
                    f"the value {value[:60]!r} is not allowed; {problem}. Correct it",
                )
    for name in CONTEXT_ALWAYS[version]:
        if name not in seen:
            return (
                0,
                name,
                "",
                f"the header lacks it, and version {version} of the standard asks for it. Add it",
            )
    return None


def kind_of_columns(names: set[str], version: str = "") -> str | None:
    """The record kind whose required columns are all among ``names`` (None when there is no such
    kind)."""
    for kind in (OPTICAL, OCCULTATION, OFFSET, RADAR):
        if set(required_columns(kind, version)) <= names:
            return kind
    if "obsTime" in names:
        for kind in (OPTICAL_RESIDUAL, RADAR_RESIDUAL):
            if all(kind in COLUMNS[c].kinds for c in names if c in COLUMNS):
                return kind
    return None


def matches(rule: ColumnRule, text: str) -> bool:
    """Whether a text fulfils the pattern of a text column."""
    return re.fullmatch(rule.pattern, text) is not None
