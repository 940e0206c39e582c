"""A look into the .xlsx package for what cached values do not tell: uncalculated formulas."""

from __future__ import annotations

import re
from zipfile import ZipFile

from openpyxl.formula.translate import Translator
from openpyxl.packaging.relationship import get_dependents, get_rels_path
from openpyxl.utils import coordinate_to_tuple
from openpyxl.xml.functions import fromstring, iterparse

# A sheet without this has no formula, and is not parsed a second time.
_ANY_FORMULA = re.compile(rb"<(?:\w+:)?f[\s/>]")
# Namespaces of ISO 29500 strict; the usual ("transitional") files have others.
_STRICT = "http://purl.oclc.org/ooxml/"
_RELATION_ID = "{http://schemas.openxmlformats.org/officeDocument/2006/relationships}id"

Place = tuple[int, int]


class StrictFormatError(ValueError):
    """The file is written in the strict flavour of the standard, which cannot be read here."""


def uncalculated_formulas(archive: ZipFile) -> dict[str, dict[Place, str]]:
    """Return per sheet the formulas that were never calculated: (row, column) -> ``=text``.

    A formula whose cached result is empty text was calculated, and is not listed.

    Raises
    ------
    StrictFormatError
        The package uses the strict namespaces.
    KeyError, ValueError, SyntaxError
        The package is damaged.
    """
    found = {}
    for title, part in _sheet_parts(archive).items():
        if _ANY_FORMULA.search(archive.read(part)):
            found[title] = _uncalculated(archive, part)
    return found


def _sheet_parts(archive: ZipFile) -> dict[str, str]:
    root = get_dependents(archive, "_rels/.rels")
    main = next(r.Target for r in root if r.Type.endswith("/officeDocument"))
    book = fromstring(archive.read(main))
    if _STRICT in book.tag:
        raise StrictFormatError
    relations = {r.Id: r for r in get_dependents(archive, get_rels_path(main))}
    sheets = (e for e in book.iter() if _local(e.tag) == "sheet")
    linked = ((e.get("name"), relations[e.get(_RELATION_ID)]) for e in sheets)
    return {name: r.Target for name, r in linked if r.Type.endswith("/worksheet")}


def _uncalculated(archive: ZipFile, part: str) -> dict[Place, str]:
    found = {}
    shared: dict[str, Translator] = {}
    with archive.open(part) as source:
        for _, element in iterparse(source):
            if _local(element.tag) == "row":
                element.clear()
            if _local(element.tag) != "c":
                continue
            parts = {_local(child.tag): child for child in element}
            if "f" not in parts:
                continue
            # The text of a shared formula stands in its first cell only, calculated or not.
            text = "=" + (parts["f"].text or "")
            place, group = element.get("r"), parts["f"].get("si")
            if text != "=" and group is not None:
                shared[group] = Translator(text, place)
            elif text == "=" and group in shared:
                text = shared[group].translate_formula(place)
            cached = "v" in parts and (parts["v"].text or element.get("t") == "str")
            if not cached:
                found[coordinate_to_tuple(place)] = text
    return found


def _local(tag: str) -> str:
    return tag.rpartition("}")[2]
