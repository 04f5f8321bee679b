"""The report: the sentence the program exists to write, and all it rests on, as plain text.

May import constants, errors and the public names of the rooms to the left of report.

The record is a plain mapping; every section is written if its key is there and left out if not:

- ``object`` (str); ``sentence`` (str, otherwise built by `the_sentence`)
- ``arc``: n_obs, span_d, first_utc, last_utc, r_min_au, r_max_au, delta_min_au, delta_max_au,
  n_nights, n_stations, n_records, and whatever else, shown as it is
- ``law`` (str), ``fits``: {"null": ..., "push": ...} with chi2, dof, rms_arcsec, n_obs,
  n_rejected, components, A_au_d2, A_sigma_au_d2, weakness; ``comparison``: delta_chi2, delta_dof,
  p_value, delta_bic (positive where it favours thrust)
- ``threshold``, ``limit``, ``posterior``, ``verdict``, ``mass``, ``mass_ceiling``, ``reach``,
  ``radiation``: the ``to_dict()`` of the corresponding objects; ``active_areas``,
  ``law_departures``: lists of such; ``mass_remarks``: why something of these does not follow;
  ``mass_other_prior``, ``mass_priors``: the mass under another prior, and the names of both;
  ``limits``: list of further limits
- ``degeneracies``: what each thrust component is confused with, in sentences
- ``suspicions``, ``caveats``, ``warnings`` (lists of sentences); ``choices``, ``seeds``
  (mappings, nested as one likes); ``provenance`` as `ngbound.report.provenance` gives it
"""

import textwrap
from collections.abc import Iterable, Mapping, Sequence
from typing import Any

from ngbound.rounding import (
    along,
    counted,
    down,
    is_number,
    length_text,
    mass_text,
    only_along,
    percent,
    rounded,
    up,
    with_asymmetric_error,
    with_error,
)

WIDTH = 96

STANDING_CAVEATS = (
    "A limit on the thrust is not an impact-hazard assessment; nothing here says where the "
    "object will be beyond its arc.",
    "A detection threshold is a property of the arc and of its error model, an upper limit is "
    "what these data allow, an estimate is what they prefer; the three are not interchangeable.",
    "All accelerations are those of the stated law at 1 au from the Sun, unless a law says "
    "otherwise.",
)

LAW_WORDS = {
    "inverse-square": "an inverse-square law",
    "water-ice": "the law of sublimating water ice",
    "power": "a power law",
    "table": "a tabulated law",
}


def the_sentence(
    *,
    name: str,
    n_obs: int,
    span_d: float,
    r_min_au: float | None = None,
    r_max_au: float | None = None,
    law: str = "",
    verdict: str = "non-detection",
    significance_sigma: float | None = None,
    false_alarm: float | None = None,
    power: float | None = None,
    threshold_au_d2: float | None = None,
    best_threshold_au_d2: float | None = None,
    components: str = "",
    confidence: float | None = None,
    limit_au_d2: float | None = None,
    limit_prior: str = "",
    other_limit_au_d2: float | None = None,
    other_limit_prior: str = "",
    estimate_au_d2: float | None = None,
    estimate_sigma_au_d2: float | None = None,
    found_sigma: float | None = None,
    reasons: Sequence[str] = (),
    budget: str = "",
    mass_kg: float | None = None,
    diameter_m: float | None = None,
    mass_confidence: float | None = None,
    mass_below_kg: float | None = None,
    diameter_below_m: float | None = None,
) -> str:
    """The sentence the program exists to write; what is not known leaves no gap.

    Parameters
    ----------
    name : str
    n_obs : int
        Observations the fit kept.
    span_d, r_min_au, r_max_au : float
        Length of the arc, d; range of heliocentric distance, au.
    law : str
        Thrust law, by its name in a case file.
    verdict : {"detection", "non-detection", "arc cannot tell", "not trustworthy", "not fitted"}
    significance_sigma, false_alarm, power : float
        Of the test that the threshold belongs to.
    threshold_au_d2, best_threshold_au_d2 : float
        In the worst and the best seen direction; the first alone if they are the same.
    components : str
        Letters of the thrust components that were looked for.
    confidence, limit_au_d2 : float
        Upper limit on |A|.
    limit_prior, other_limit_prior : str
        Names of the priors of the limit, and of the one beside it.
    other_limit_au_d2 : float
    estimate_au_d2, estimate_sigma_au_d2, found_sigma : float
        Size of the fitted thrust with its error, and its significance in sigma.
    reasons : sequence of str
        Clauses why the verdict is not a plain one.
    budget : str
        The outgassing in words, "a mass-loss rate of ... and a collimation of ...".
    mass_kg, diameter_m, mass_confidence : float
        Lower bounds.
    mass_below_kg, diameter_below_m : float
        Upper bounds, where a thrust was detected.

    Notes
    -----
    Thresholds and upper limits are rounded up to two digits, lower bounds down.
    """
    facts = [counted(n_obs, "observation")] if n_obs else []
    if span_d > 0:
        facts.append(_span(span_d))
    if is_number(r_min_au) and is_number(r_max_au):
        near, far = f"{r_min_au:.2f}", f"{r_max_au:.2f}"
        facts.append(f"r = {near} au" if near == far else f"r from {near} to {far} au")
    told = f" ({', '.join(facts)})" if facts else ""
    parts = [f"The arc of {name}{told} {_finding(verdict, reasons)}."]
    estimate = _estimate(verdict, law, estimate_au_d2, estimate_sigma_au_d2, found_sigma)
    parts += [estimate] if estimate else []
    clauses = []
    if is_number(threshold_au_d2):
        clauses.append(
            _threshold(
                only_along(components),
                "" if estimate else law,
                significance_sigma,
                false_alarm,
                power,
                threshold_au_d2,
                best_threshold_au_d2,
            )
        )
    if is_number(limit_au_d2):
        at = f"at {percent(confidence)} confidence " if is_number(confidence) else ""
        belief = ""
        if limit_prior:
            belief = f" under the {limit_prior} prior"
            if is_number(other_limit_au_d2) and other_limit_prior:
                other = up(other_limit_au_d2)
                belief += f" ({other} under {other_limit_prior})"
        clauses.append(f"{at}|A| < {up(limit_au_d2)} au/d2{belief}")
    if clauses:
        text = "; ".join(clauses)
        parts.append(text[0].upper() + text[1:] + ".")
    mass = _mass(budget, mass_kg, diameter_m, mass_confidence, confidence)
    parts += [mass] if mass else []
    if is_number(mass_below_kg) and is_number(diameter_below_m):
        parts.append(
            f"If nothing but the outgassing given pushes, the mass is below "
            f"{mass_text(mass_below_kg, outward='up')}, the diameter below "
            f"{length_text(diameter_below_m, outward='up')}."
        )
    return " ".join(parts)


def _span(span_d: float) -> str:
    if span_d >= 1000:
        return f"{span_d / 365.25:.1f} years"
    if span_d >= 10:
        return f"{span_d:.0f} days"
    if span_d >= 1:
        return f"{span_d:.1f} days"
    return f"{24 * span_d:.1f} hours"


def _finding(verdict: str, reasons: Sequence[str]) -> str:
    because = f": {'; '.join(reasons)}" if reasons else ""
    if verdict == "not fitted":
        return "was read, but no orbit was fitted to it"
    if verdict == "detection":
        return "is not explained by gravity alone"
    if verdict == "not trustworthy":
        return "is fitted better with a thrust, but this cannot be trusted as a detection" + because
    if verdict == "arc cannot tell":
        return f"is fitted by gravity alone, but could not have told otherwise{because}"
    return f"is explained by gravity alone{because}"


def _law(law: str) -> str:
    return LAW_WORDS.get(law, f"the law {law}") if law else ""


def _estimate(
    verdict: str, law: str, size: float | None, sigma: float | None, found: float | None
) -> str:
    if verdict not in ("detection", "not trustworthy") or not is_number(size):
        return ""
    following = f" following {_law(law)}" if law else ""
    word = "is detected" if verdict == "detection" else "would come out"
    at = f" at {found:.{1 if found < 10 else 0}f} sigma" if is_number(found) else ""
    value = with_error(size, sigma if is_number(sigma) else float("nan"))
    return f"A thrust{following} {word}{at}, |A| = {value} au/d2."


def prior_name(described: Any) -> str:
    """The name of a prior out of its description, without its components and edge."""
    return str(described or "").split(" in ")[0].split(",")[0].strip()


def _threshold(
    axes: str,
    law: str,
    sigma: float | None,
    false_alarm: float | None,
    power: float | None,
    worst: float,
    best: float | None,
) -> str:
    following = f" {axes}" if axes else ""
    following += f" following {_law(law)}" if law else ""
    at = ""
    if is_number(sigma):
        at = f" at {sigma:.1f} sigma"
        if is_number(false_alarm):
            at += f" (false-alarm rate {percent(false_alarm)})"
    elif is_number(false_alarm):
        at = f" at a false-alarm rate of {percent(false_alarm)}"
    chance = ""
    if is_number(power):
        chance = f" with probability {percent(power)}"
    high = up(worst)
    value = f"{high} au/d2"
    if is_number(best):
        low = up(best)
        value += (
            ("" if axes else " in any direction")
            if low == high
            else (f" in the direction this arc sees worst, {low} au/d2 in the one it sees best")
        )
    return f"a thrust{following} would have been detected{at}{chance} if it had exceeded {value}"


def _mass(
    budget: str,
    mass_kg: float | None,
    diameter_m: float | None,
    confidence: float | None,
    quoted: float | None,
) -> str:
    if not is_number(mass_kg) or mass_kg <= 0:
        return ""
    text = f"With {budget or 'the outgassing budget given'} this demands a mass above "
    text += mass_text(mass_kg)
    if is_number(diameter_m) and diameter_m > 0:
        text += f", a diameter above {length_text(diameter_m)}"
    if is_number(confidence) and confidence != quoted:
        text += f", at {percent(confidence)} confidence"
    return text + "."


def sentence_of(record: Mapping[str, Any]) -> str:
    """`the_sentence` from a record."""
    arc, fits = record.get("arc") or {}, record.get("fits") or {}
    threshold, limit = record.get("threshold") or {}, record.get("limit") or {}
    judged, mass = record.get("verdict") or {}, record.get("mass") or {}
    ceiling = record.get("mass_ceiling") or {}
    null = fits.get("null") or {}
    return the_sentence(
        name=str(record.get("object") or "the object"),
        n_obs=int(null.get("n_obs") or arc.get("n_obs") or 0),
        span_d=float(arc.get("span_d") or 0.0),
        r_min_au=arc.get("r_min_au"),
        r_max_au=arc.get("r_max_au"),
        law=str(record.get("law") or ""),
        verdict=str(judged.get("kind") or ("non-detection" if fits else "not fitted")),
        significance_sigma=threshold.get("significance_sigma"),
        false_alarm=threshold.get("false_alarm"),
        power=threshold.get("power"),
        threshold_au_d2=threshold.get("worst_au_d2"),
        best_threshold_au_d2=threshold.get("best_au_d2"),
        components=str(threshold.get("components") or ""),
        confidence=limit.get("confidence"),
        limit_au_d2=limit.get("magnitude_au_d2"),
        limit_prior=prior_name(limit.get("prior")),
        other_limit_au_d2=limit.get("alternative_magnitude_au_d2"),
        other_limit_prior=prior_name(limit.get("alternative_prior")),
        estimate_au_d2=judged.get("estimate_au_d2"),
        estimate_sigma_au_d2=judged.get("estimate_sigma_au_d2"),
        found_sigma=judged.get("significance_sigma"),
        reasons=tuple(judged.get("reasons") or ()),
        budget=budget_words(mass),
        mass_kg=mass.get("mass_kg"),
        diameter_m=mass.get("diameter_m"),
        mass_confidence=mass.get("confidence"),
        mass_below_kg=ceiling.get("mass_kg"),
        diameter_below_m=ceiling.get("diameter_m"),
    )


def budget_words(mass: Mapping[str, Any]) -> str:
    """The outgassing behind a mass bound in words: ``budget`` if given, else its emissions.

    Rates that are upper limits are left out, as the bound leaves them out.
    """
    if mass.get("budget"):
        return str(mass["budget"])
    emissions = list((mass.get("outgassing") or {}).get("emissions") or ())
    told = [_emission_words(e) for e in emissions if "limit" not in (e.get("rate") or {})]
    return "; and ".join(text for text in told if text)


def _emission_words(one: Mapping[str, Any]) -> str:
    rate = _distribution_words(one.get("rate") or {})
    if not rate:
        return ""
    told = [f"a production rate of {rate}"]
    told[0] += f" ({one['species']})" if one.get("species") else ""
    told[0] += f" at {one['at_au']:g} au" if is_number(one.get("at_au")) else ""
    speed = one.get("speed") or {}
    if _distribution_words(speed):
        told.append(f"a speed of {_distribution_words(speed)}")
    elif is_number(one.get("median_speed_m_s")):
        told.append(f"a speed of {rounded(one['median_speed_m_s'], 2)} m/s")
    if _distribution_words(one.get("collimation") or {}):
        told.append(f"a collimation of {_distribution_words(one['collimation'])}")
    return told[0] if len(told) == 1 else f"{', '.join(told[:-1])} and {told[-1]}"


def _distribution_words(known: Mapping[str, Any]) -> str:
    """A distribution's ``to_dict()`` in words, with its unit; "" if it is not one."""
    kind, value = known.get("distribution"), known.get("value")
    low, high = known.get("low"), known.get("high")
    text = ""
    if is_number(value) and is_number(known.get("sigma")):
        text = with_error(value, known["sigma"])
    elif is_number(value) and is_number(known.get("plus")) and is_number(known.get("minus")):
        text = with_asymmetric_error(value, known["minus"], known["plus"])
    elif is_number(value) and is_number(known.get("factor")):
        text = f"{rounded(value, 3)} (within a factor {rounded(known['factor'], 2)})"
    elif is_number(value):
        text = f"{value:.4g}"
    elif is_number(low) and is_number(high):
        text = f"{low:g} to {high:g}"
        if is_number(known.get("mode")):
            text = f"{known['mode']:g} ({text})"
    elif is_number(known.get("limit")):
        text = f"less than {known['limit']:.4g}"
    unit = str(known.get("unit") or "")
    return f"{text} {unit}".strip() if kind and text else ""


def render_report(
    record: Mapping[str, Any],
    tables: Iterable[Any] = (),
    figures: Iterable[str] = (),
    *,
    width: int = WIDTH,
) -> str:
    """The report as plain text with headings a terminal and Markdown both understand.

    Parameters
    ----------
    record : mapping
        See the module; the data of a Record.
    tables : iterable of SmallTable or str
        Shown after the mass, each as it prints itself.
    figures : iterable of str
        File names, listed.
    width : int
        Columns.
    """
    page = _Page(width)
    page.heading(f"ngbound: {record.get('object') or 'report'}", "=")
    page.prose(str(record.get("sentence") or sentence_of(record)))
    _write_verdict(page, record)
    _write_arc(page, record)
    _write_fits(page, record)
    _write_threshold(page, record)
    _write_limits(page, record)
    _write_mass(page, record)
    shown = [str(t) for t in tables]
    if shown:
        page.heading("Tables")
        for text in shown:
            page.block(text)
    for key, title in (("choices", "Choices"), ("seeds", "Seeds")):
        if record.get(key):
            page.heading(title)
            page.pairs(_flat(record[key]))
    page.heading("Caveats")
    for text in (*(record.get("caveats") or ()), *STANDING_CAVEATS):
        page.item(text)
    listed = [str(f) for f in figures]
    if listed:
        page.heading("Figures")
        for text in listed:
            page.item(text)
    _write_provenance(page, record)
    return page.text()


class _Page:
    """Lines of text under headings."""

    def __init__(self, width: int) -> None:
        self.width = width
        self.lines: list[str] = []

    def heading(self, text: str, rule: str = "-") -> None:
        if self.lines:
            self.lines.append("")
        self.lines += [text, rule * len(text), ""]

    def prose(self, text: str) -> None:
        self.lines += textwrap.wrap(
            text, self.width, break_long_words=False, break_on_hyphens=False
        )

    def paragraph(self, text: str) -> None:
        """Prose after an empty line."""
        if self.lines and self.lines[-1]:
            self.lines.append("")
        self.prose(text)

    def item(self, text: str) -> None:
        if self.lines and self.lines[-1].startswith("    "):
            self.lines.append("")
        self.lines += textwrap.wrap(
            str(text),
            self.width,
            initial_indent="- ",
            subsequent_indent="  ",
            break_long_words=False,
            break_on_hyphens=False,
        )

    def block(self, text: str) -> None:
        """Lines kept as they are; Markdown shows text indented by four as it stands."""
        if self.lines and self.lines[-1]:
            self.lines.append("")
        self.lines += [("    " + line).rstrip() for line in text.splitlines()] + [""]

    def pairs(self, rows: Sequence[tuple[str, str]]) -> None:
        rows = [(k, v) for k, v in rows if v]
        if not rows:
            return
        wide = min(max(len(k) for k, _ in rows), 44)
        if self.lines and self.lines[-1]:
            self.lines.append("")
        for key, value in rows:
            lead = f"    {key.ljust(wide)}  "
            self.lines += textwrap.wrap(
                value,
                max(self.width, len(lead) + 20),
                initial_indent=lead,
                subsequent_indent=" " * len(lead),
                break_long_words=False,
                break_on_hyphens=False,
            )

    def text(self) -> str:
        while self.lines and not self.lines[-1]:
            self.lines.pop()
        tidy: list[str] = []
        for line in self.lines:
            if line or (tidy and tidy[-1]):
                tidy.append(line)
        return "\n".join(tidy) + "\n"


def _show(value: Any) -> str:
    """A value of a record as text; "" for what is missing."""
    if value is None or value == "" or (isinstance(value, float) and not is_number(value)):
        return ""
    if isinstance(value, bool):
        return "yes" if value else "no"
    if isinstance(value, float):
        return f"{value:.6g}"
    if isinstance(value, Mapping) and set(value) == {"value", "unit"}:
        return f"{_show(value['value'])} {value['unit']}".strip()
    if isinstance(value, (list, tuple)):
        return ", ".join(_show(v) or "-" for v in value)
    return str(value)


def _flat(tree: Mapping[str, Any], stem: str = "") -> list[tuple[str, str]]:
    rows: list[tuple[str, str]] = []
    for key, value in tree.items():
        name = f"{stem}{key}"
        if isinstance(value, Mapping) and set(value) != {"value", "unit"}:
            rows += _flat(value, f"{name}.")
        elif isinstance(value, (list, tuple)) and any(isinstance(one, Mapping) for one in value):
            for number, one in enumerate(value, start=1):
                rows += _flat(one, f"{name}.{number}.")
        else:
            rows.append((name, _show(value)))
    return rows


def _error_pair(value: Any, error: Any) -> str:
    if not is_number(value):
        return ""
    return with_error(value, error) if is_number(error) else rounded(value, 3)


def _write_verdict(page: _Page, record: Mapping[str, Any]) -> None:
    judged = record.get("verdict") or {}
    suspicions = record.get("suspicions") or ()
    warned = record.get("warnings") or ()
    if not (judged or suspicions or warned):
        return
    page.heading("Verdict")
    if judged.get("sentence"):
        page.prose(str(judged["sentence"]))
    elif judged.get("kind"):
        page.prose(f"{str(judged['kind']).capitalize()}.")
    if suspicions:
        page.lines.append("")
        page.prose("The residuals are not what the error model assumes:")
        for text in suspicions:
            page.item(text)
    if warned:
        page.lines.append("")
        for text in warned:
            page.item(text)
    findings = record.get("findings") or ()
    if findings:
        page.lines.append("")
        page.prose("Found doubtful in the arc before any orbit:")
        for found in findings:
            page.item(str(found.get("sentence") if isinstance(found, Mapping) else found))


ARC_WORDS = {
    "n_records": "records read",
    "n_obs": "usable observations",
    "n_nights": "station-nights",
    "n_stations": "stations",
    "first_utc": "first (UTC)",
    "last_utc": "last (UTC)",
    "span_d": "span (d)",
    "r_min_au": "least distance from the Sun (au)",
    "r_max_au": "greatest distance from the Sun (au)",
    "delta_min_au": "least distance from the observer (au)",
    "delta_max_au": "greatest distance from the observer (au)",
}


def _write_arc(page: _Page, record: Mapping[str, Any]) -> None:
    arc = record.get("arc") or {}
    if not arc:
        return
    page.heading("Arc")
    known = [(words, _show(arc.get(key))) for key, words in ARC_WORDS.items()]
    others = {k: v for k, v in arc.items() if k not in ARC_WORDS}
    page.pairs(known + _flat(others))


def _write_fits(page: _Page, record: Mapping[str, Any]) -> None:
    fits = record.get("fits") or {}
    if not any(fits.values()):
        return
    page.heading("Fits")
    for key, title in (("null", "gravity alone"), ("push", "with thrust")):
        fit = fits.get(key) or {}
        if not fit:
            continue
        told = []
        if is_number(fit.get("chi2")) and is_number(fit.get("dof")):
            told.append(f"chi2 {fit['chi2']:.1f} for {fit['dof']:.0f} degrees of freedom")
        if is_number(fit.get("rms_arcsec")):
            told.append(f"rms {fit['rms_arcsec']:.3f} arcsec")
        if is_number(fit.get("weighted_rms_arcsec")):
            told.append(f"weighted {fit['weighted_rms_arcsec']:.3f} arcsec")
        if is_number(fit.get("n_obs")):
            told.append(counted(int(fit["n_obs"]), "observation") + " kept")
        if is_number(fit.get("n_rejected")):
            told.append(f"{int(fit['n_rejected'])} rejected")
        radar = fit.get("radar") or {}
        told += [
            f"{counted(int(radar[f'n_{name}']), words)}, rms {radar[key]:.3g} {unit} "
            f"({radar[f'chi_{name}']:.2f} sigma)"
            for name, words, key, unit in (
                ("delay", "radar delay", "rms_delay_us", "microseconds"),
                ("doppler", "Doppler shift", "rms_doppler_hz", "Hz"),
            )
            if radar.get(f"n_{name}")
        ]
        page.item(f"{title}: {', '.join(told)}")
        if fit.get("weakness"):
            page.item(str(fit["weakness"]))
        values, errors = fit.get("A_au_d2") or (), fit.get("A_sigma_au_d2") or ()
        letters = str(fit.get("components") or "")
        if letters and len(values) == len(letters):
            padded = [*errors, *[None] * (len(values) - len(errors))]
            page.pairs(
                [
                    (f"A_{c}", f"{_error_pair(v, e)} au/d2")
                    for c, v, e in zip(letters, values, padded, strict=True)
                    if is_number(v)
                ]
            )
    compared = record.get("comparison") or {}
    if is_number(compared.get("delta_chi2")):
        text = f"thrust lowers chi2 by {compared['delta_chi2']:.2f}"
        if is_number(compared.get("n_obs")):
            text += f" over the {int(compared['n_obs'])} observations fitted alike by both"
        if is_number(compared.get("delta_dof")):
            text += f" for {counted(int(compared['delta_dof']), 'parameter')}"
        if is_number(compared.get("p_value")):
            text += f", p = {compared['p_value']:.2g}"
            if is_number(compared.get("significance_sigma")):
                text += f" ({compared['significance_sigma']:.1f} sigma)"
        if is_number(compared.get("delta_bic")):
            better = "thrust" if compared["delta_bic"] > 0 else "gravity alone"
            text += f"; the BIC favours {better} by {abs(compared['delta_bic']):.1f}"
        page.item(text)


def _write_threshold(page: _Page, record: Mapping[str, Any]) -> None:
    found = record.get("threshold") or {}
    if not found:
        return
    page.heading("Detection thresholds")
    page.prose(
        "The smallest thrust (au/d2 at 1 au) that a test with false-alarm rate "
        f"{percent(found.get('false_alarm', float('nan')))} finds with probability "
        f"{percent(found.get('power', float('nan')))}: a property of the arc and its noise, "
        "whatever the estimate. Rounded up."
    )
    letters = str(found.get("components") or "")
    rows = []
    for key, words in (
        ("held_au_d2", "one component, others held at zero"),
        ("free_au_d2", "one component, others free"),
        ("direction_free_au_d2", "along it, all tested together"),
    ):
        for letter, value in zip(letters, found.get(key) or (), strict=False):
            if is_number(value):
                rows.append((f"{letter}: {words}", up(value)))
    for key, words in (
        ("best_au_d2", "best seen direction"),
        ("worst_au_d2", "worst seen direction"),
        ("isotropic_mean_au_d2", "mean over all directions"),
    ):
        if is_number(found.get(key)):
            where = found.get(key.replace("_au_d2", "_direction"))
            rows.append(
                (words, up(found[key]) + (f"  along {along(letters, where)}" if where else ""))
            )
    page.pairs(rows)
    for sentence in record.get("degeneracies") or ():
        page.item(sentence)


def _write_limits(page: _Page, record: Mapping[str, Any]) -> None:
    limit = record.get("limit") or {}
    if not limit:
        return
    page.heading("Upper limits")
    page.prose(
        f"What these data allow, at {percent(limit.get('confidence', float('nan')))} confidence "
        "(au/d2 at 1 au):"
    )
    rows = [
        (
            "|A|",
            _limit(limit.get("magnitude_au_d2"), limit.get("magnitude_error_au_d2"))
            + f"  (prior {limit.get('prior')}; {limit.get('source')})",
        )
    ]
    if is_number(limit.get("alternative_magnitude_au_d2")):
        rows.append(
            (
                "|A|",
                _limit(limit["alternative_magnitude_au_d2"], limit.get("alternative_error_au_d2"))
                + f"  (prior {limit.get('alternative_prior')}; {limit.get('alternative_source')})",
            )
        )
    if is_number(limit.get("profile_magnitude_au_d2")):
        rows.append(
            ("|A|", _limit(limit["profile_magnitude_au_d2"], None) + "  (profile likelihood)")
        )
    letters = str(limit.get("components") or "")
    errors = limit.get("component_error_au_d2") or [None] * len(letters)
    for letter, value, error in zip(
        letters, limit.get("component_au_d2") or (), errors, strict=False
    ):
        rows.append((f"|A_{letter}|", _limit(value, error)))
    if is_number(limit.get("outward_radial_au_d2")):
        rows.append(
            (
                "A_R, outward only",
                _limit(limit["outward_radial_au_d2"], limit.get("outward_radial_error_au_d2")),
            )
        )
    interval = limit.get("unified_radial_au_d2")
    if interval:
        low, high = interval
        rows.append(
            (
                "A_R, outward only",
                f"{down(low)} to {up(high)}  (unified interval)",
            )
        )
    page.pairs(rows)
    if limit.get("caveat"):
        page.item(str(limit["caveat"]))
    if limit.get("message"):
        page.item(str(limit["message"]))
    for other in record.get("limits") or ():
        page.item(
            _show(other)
            if not isinstance(other, Mapping)
            else "; ".join(f"{k} {v}" for k, v in _flat(other) if v)
        )


def _limit(value: Any, error: Any) -> str:
    if not is_number(value):
        return "not available"
    text = f"< {up(value)}"
    return text + (f" (+- {rounded(error, 1)})" if is_number(error) and error > 0 else "")


def render_mass(record: Mapping[str, Any], *, width: int = WIDTH) -> str:
    """The section on mass and size alone, as plain text; keys as in a record."""
    page = _Page(width)
    _write_mass(page, record)
    return page.text().rstrip("\n")


def _write_mass(page: _Page, record: Mapping[str, Any]) -> None:
    mass, ceiling = record.get("mass") or {}, record.get("mass_ceiling") or {}
    remarks = record.get("mass_remarks") or ()
    if mass or ceiling or remarks or record.get("active_areas"):
        page.heading("Mass and size")
    if mass.get("sentence"):
        page.prose(str(mass["sentence"]))
    elif is_number(mass.get("mass_kg")):
        page.prose(
            _mass(
                budget_words(mass),
                mass["mass_kg"],
                mass.get("diameter_m"),
                mass.get("confidence"),
                None,
            )
        )
    other, priors = record.get("mass_other_prior") or {}, record.get("mass_priors") or ("", "")
    if other:
        upper = rounded(other["acceleration_upper_au_d2"], 2, outward="up")
        page.paragraph(
            f"The posterior is that of the {priors[0]} prior. With |A| held at its limit under "
            f"{priors[1]} instead, {upper} au/d2, the mass is above {mass_text(other['mass_kg'])}, "
            f"the diameter above {length_text(other['diameter_m'])}, at "
            f"{percent(other['confidence'])} confidence of the budget (at least "
            f"{percent(other['joint_confidence'])} together with that of the limit)."
        )
    if ceiling:
        page.paragraph(str(ceiling["sentence"]))
    if mass.get("table"):
        page.paragraph(
            "Mass (kg) when one input alone moves from its 16th to its 84th percentile, the others "
            "at their medians; the lower bound if that input were exactly its median; the share of "
            "each in the variance of ln M and ln D, with its interactions (Sobol's total index):"
        )
        page.block(str(mass["table"]))
    for one in mass.get("law_checks") or ():
        page.item(f"rates against the thrust law: {one['sentence']}.")
    for one in record.get("law_departures") or ():
        told = str(one["sentence"])
        page.item(f"thrust law against sublimation: {told[0].lower()}{told[1:]}")
    for one in record.get("active_areas") or ():
        page.item(f"active surface: {one['sentence']}")
    for text in remarks:
        page.item(str(text))
    areas = [str(one["assumption"]) for one in record.get("active_areas") or ()]
    for text in dict.fromkeys([*(mass.get("assumptions") or ()), *areas]):
        page.item(f"assumed: {text}")
    _write_reach(page, record.get("reach") or {}, mass.get("assumptions") or ())
    _write_radiation(page, record.get("radiation") or {})


def _write_reach(page: _Page, found: Mapping[str, Any], told: Sequence[str]) -> None:
    if not found:
        return
    page.heading("Reach: the outgassing this arc would have revealed")
    page.prose(str(found["sentence"]))
    page.block(str(found["table"]))
    for text in found.get("assumptions") or ():
        if text not in told:
            page.item(f"assumed: {text}")


def _write_radiation(page: _Page, found: Mapping[str, Any]) -> None:
    if not found:
        return
    page.heading("Sunlight instead of gas")
    page.prose(str(found["sentence"]))
    for text in found.get("assumptions") or ():
        page.item(f"assumed: {text}")


def _write_provenance(page: _Page, record: Mapping[str, Any]) -> None:
    made = record.get("provenance") or {}
    if not made:
        return
    page.heading("Provenance")
    packages = made.get("packages") or {}
    rows = [
        ("written (UTC)", _show(made.get("written_utc"))),
        ("Python", _show(made.get("python"))),
        ("platform", _show(made.get("platform"))),
        ("packages", ", ".join(f"{k} {v}" for k, v in packages.items() if v)),
    ]
    for role, entry in (made.get("inputs") or {}).items():
        rows.append((role, f"{entry.get('name')}, SHA-256 {entry.get('sha256')}"))
    page.pairs(rows)
