"""ADES in XML: read and write; imports lxml, errors and this room.

The parser resolves no entity, loads no document type and opens no network connection; a document
that declares a document type is refused.
"""

import re
import warnings

import numpy as np
from lxml import etree

from ngbound.arc.ades_rules import (
    COLUMNS,
    CONTEXT_ELEMENTS,
    OPTICAL_RESIDUAL,
    RADAR_RESIDUAL,
    RECORD_KINDS,
    VERSIONS,
    context_problem,
)
from ngbound.arc.ades_text import checked_contexts, grouped_cells
from ngbound.arc.observations import Arc
from ngbound.arc.records import Context, ObjectArray, Records, merge_contexts
from ngbound.arc.whole_file import PathLike, write_whole
from ngbound.errors import ArcError, NgboundWarning

LINE_BREAKS = re.compile(r"[\t\n\r]")
"""Breaks and tabs inside free text, which XML allows and PSV cannot hold, are read as blanks."""


def xml_records(content: bytes, source: str) -> Records:
    """Records of an ADES XML document; ArcError names line and element."""
    parser = etree.XMLParser(
        resolve_entities=False,
        no_network=True,
        huge_tree=False,
        load_dtd=False,
        dtd_validation=False,
        remove_comments=True,
        remove_pis=True,
    )
    try:
        root = etree.fromstring(content, parser)
    except (etree.XMLSyntaxError, ValueError, LookupError) as error:
        line = getattr(error, "lineno", None) or 1
        raise ArcError(
            f"{source}, line {line}: the XML text is broken ({str(error).splitlines()[0]}). Mend "
            "it or get the file again.",
            file=source,
            line=line,
        ) from error
    if root.getroottree().docinfo.doctype:
        raise ArcError(
            f"{source}: the XML document declares a document type, which ADES does not have and "
            "ngbound does not read. "
            "Remove the DOCTYPE.",
            file=source,
        )
    if root.tag != "ades":
        raise ArcError(
            f"{source}, line {root.sourceline}: the root element is {root.tag!r}; an ADES document "
            "has 'ades' (no namespace). "
            "Give an ADES file.",
            file=source,
            line=root.sourceline,
        )
    version = root.get("version", "")
    if version not in VERSIONS:
        raise ArcError(
            f"{source}, line {root.sourceline}: the attribute version of ades is {version!r}; it "
            "must be "
            f"{' or '.join(VERSIONS)}. Correct it.",
            file=source,
            line=root.sourceline,
            value=version,
        )
    return _walk(root, source, version)


def _walk(root: etree._Element, source: str, version: str) -> Records:
    contexts: list[Context] = []
    kinds: list[str] = []
    lines: list[int] = []
    blocks: list[int] = []
    cells: dict[str, dict[int, str]] = {}
    skipped = 0
    order = {name: at for at, name in enumerate(COLUMNS)}

    def record(element: etree._Element, block: int) -> None:
        nonlocal skipped
        row = len(kinds)
        kinds.append(element.tag)
        lines.append(element.sourceline or 0)
        blocks.append(block)
        last, behind = -1, ""
        _refuse_loose_text(element, source)
        for child in element:
            name = child.tag
            if name == "localUse":
                skipped += 1
                continue
            rule = COLUMNS.get(name)
            if rule is None or element.tag not in rule.kinds:
                raise _fail(
                    child,
                    source,
                    name,
                    f"it is not an element of {element.tag} records",
                    "Remove it.",
                )
            if order[name] < last and {name, behind} != {"delay", "doppler"}:
                raise _fail(
                    child,
                    source,
                    name,
                    f"it stands after {behind}, and the standard fixes the order",
                    f"Put it before {behind}.",
                )
            last, behind = order[name], name
            if row in cells.setdefault(name, {}):
                raise _fail(
                    child,
                    source,
                    name,
                    f"it stands twice in one {element.tag} record",
                    "Keep one of them.",
                )
            if len(child):
                raise _fail(
                    child, source, name, "it holds something besides text", "Give plain text."
                )
            text = (child.text or "").strip()
            if rule.pattern.startswith("."):
                text = LINE_BREAKS.sub(" ", text)
            if not text:
                raise _fail(
                    child, source, name, "it is empty", "Leave out an element that has no value."
                )
            cells[name][row] = text

    loose = [name for name in root.attrib if name != "version"]
    if loose:
        problem, remedy = f"it has the attribute {loose[0]!r}", "Remove the attribute."
        raise _fail(root, source, "ades", problem, remedy)
    for between, place in [(root.text, root), *((child.tail, child) for child in root)]:
        if between and between.strip():
            raise _fail(place, source, "ades", "text stands between its elements", "Remove it.")
    for element in root:
        if element.tag in RECORD_KINDS:
            record(element, -1)
        elif element.tag == "obsBlock":
            parts = [child.tag for child in element]
            if parts != ["obsContext", "obsData"]:
                raise _fail(
                    element,
                    source,
                    "obsBlock",
                    "it must hold obsContext and then obsData, once each",
                    "Correct the block.",
                )
            contexts.append(_context(element[0], source, version))
            data = element[1]
            _refuse_loose_text(element, source)
            _refuse_loose_text(data, source)
            if not len(data):
                raise _fail(data, source, "obsData", "it holds no record", "Add records.")
            for child in data:
                if child.tag not in RECORD_KINDS or child.tag in (OPTICAL_RESIDUAL, RADAR_RESIDUAL):
                    raise _fail(
                        child,
                        source,
                        str(child.tag),
                        "it is not a kind of record that may stand in obsData",
                        f"Use one of {', '.join(RECORD_KINDS[:4])}.",
                    )
                if child.tag != data[0].tag:
                    raise _fail(
                        child,
                        source,
                        str(child.tag),
                        "an obsData holds records of one kind only",
                        "Give it an obsBlock of its own.",
                    )
                record(child, len(contexts) - 1)
        else:
            raise _fail(
                element,
                source,
                str(element.tag),
                "it is not a child of ades",
                f"Use obsBlock or one of {', '.join(RECORD_KINDS)}.",
            )
    if skipped:
        warnings.warn(
            f"{source}: localUse was left out of {skipped} records; ngbound has no use for it.",
            NgboundWarning,
            stacklevel=2,
        )
    n = len(kinds)
    distinct, place = merge_contexts(contexts)
    text: dict[str, ObjectArray] = {}
    for name in COLUMNS:
        if name in cells:
            column = np.full(n, "", dtype=object)
            column[list(cells[name])] = list(cells[name].values())
            text[name] = column
    return Records(
        source=source,
        text=text,
        kind=np.array(kinds, dtype=object),
        line=np.array(lines, dtype=np.int64),
        block=np.array([place[b] if b >= 0 else -1 for b in blocks], dtype=np.int64),
        set_aside=np.full(n, "", dtype=object),
        contexts=distinct,
        version=version,
    )


def _context(element: etree._Element, source: str, version: str) -> Context:
    out = []
    _refuse_loose_text(element, source)
    for child in element:
        if child.tag not in CONTEXT_ELEMENTS:
            raise _fail(
                child,
                source,
                str(child.tag),
                "it is not an element of obsContext",
                f"Use one of {', '.join(CONTEXT_ELEMENTS)}.",
            )
        if child.tag != "fundingSource":
            _refuse_loose_text(child, source)
        grand = []
        for leaf in child:
            if leaf.tag not in CONTEXT_ELEMENTS[child.tag]:
                raise _fail(
                    leaf,
                    source,
                    str(leaf.tag),
                    f"it is not an element of {child.tag}",
                    "Remove it.",
                )
            if len(leaf) or leaf.attrib:
                raise _fail(
                    leaf, source, leaf.tag, "it holds something besides text", "Give plain text."
                )
            grand.append((str(leaf.tag), " ".join((leaf.text or "").split())))
        text = " ".join((child.text or "").split()) if child.tag == "fundingSource" else ""
        out.append((str(child.tag), text, tuple(grand)))
    context = tuple(out)
    problem = context_problem(context, version)
    if problem is not None:
        at, name, _, sentence = problem
        where = element[at] if len(element) else element
        raise _fail(where, source, name, *sentence.rsplit(". ", 1))
    return context


def _refuse_loose_text(element: etree._Element, source: str) -> None:
    """Text between the children of an element, and attributes, which the standard does not have."""
    loose = [element.text, *(child.tail for child in element)]
    if any(text and text.strip() for text in loose):
        raise _fail(
            element, source, str(element.tag), "text stands between its elements", "Remove it."
        )
    for child in (element, *element):
        if child.attrib:
            raise _fail(
                child, source, str(child.tag), "it has an attribute", "Remove the attribute."
            )


def _fail(element: etree._Element, source: str, name: str, problem: str, remedy: str) -> ArcError:
    return ArcError(
        f"{source}, line {element.sourceline}, element {name}: {problem}. {remedy.rstrip('.')}.",
        file=source,
        line=element.sourceline,
        column=name,
        value=element.text if isinstance(element.text, str) else "",
    )


def write_xml(arc: Arc, path: PathLike, *, version: str = "2022") -> None:
    """Write every record of an arc as ADES XML, headers included, in one step; the rules of
    `write_psv` hold."""
    checked_contexts(arc, version)
    root = etree.Element("ades", version=version)
    for run in grouped_cells(arc, version):
        parent = root
        if run.block >= 0:
            holder = etree.SubElement(root, "obsBlock")
            _context_elements(etree.SubElement(holder, "obsContext"), arc.contexts[run.block])
            parent = etree.SubElement(holder, "obsData")
        for i in range(len(run.rows)):
            element = etree.SubElement(parent, run.kind)
            for name, cells in run.columns.items():
                if cells[i]:
                    etree.SubElement(element, name).text = cells[i]
    write_whole(
        path, etree.tostring(root, xml_declaration=True, encoding="UTF-8", pretty_print=True)
    )


def _context_elements(parent: etree._Element, context: Context) -> None:
    for name, text, children in context:
        element = etree.SubElement(parent, name)
        if text:
            element.text = text
        for child, value in children:
            etree.SubElement(element, child).text = value
