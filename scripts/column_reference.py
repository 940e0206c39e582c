"""Write the generated tables of README.md: sheets, limits, and every column in and out.

Usage: ``python scripts/column_reference.py``.  Each table stands between a pair of comments,
``<!-- generated: NAME -->`` and ``<!-- end: NAME -->``; everything else is left alone.
"""

from __future__ import annotations

import re
from collections.abc import Iterable, Sequence
from pathlib import Path

from feederhost.schema import INPUT, NUMBER, PHASES, RESULT, Column, Sheet
from feederhost.settings import sheet_settings

README = Path(__file__).parents[1] / "README.md"
_MATRIX = re.compile(r"[rxb]_[abc]{2}")


def generated() -> dict[str, str]:
    """Return the generated tables by the name between their comments."""
    return {
        "sheets": _sheets(),
        "limits": _limits(),
        "input columns": "\n\n".join(_input(sheet) for sheet in INPUT.values()),
        "result columns": "\n\n".join(
            _details(
                f"{o.name}: {o.meaning}", _table(("column", "meaning"), map(_coded, o.columns))
            )
            for o in RESULT.values()
        ),
    }


def renewed(text: str) -> str:
    """Return the text of the README with its tables generated anew."""
    for name, table in generated().items():
        start, end = f"<!-- generated: {name} -->", f"<!-- end: {name} -->"
        before, _, rest = text.partition(start)
        _, _, after = rest.partition(end)
        text = f"{before}{start}\n\n{table}\n\n{end}{after}"
    return text


def _table(header: Sequence[str], rows: Iterable[Sequence[str]]) -> str:
    lines = [header, ["---"] * len(header), *rows]
    return "\n".join(f"| {' | '.join(c.replace('|', '/') for c in line)} |" for line in lines)


def _details(title: str, body: str) -> str:
    return f"<details><summary>{title}</summary>\n\n{body}\n\n</details>"


def _coded(row: Sequence[str]) -> tuple[str, ...]:
    return (f"`{row[0]}`", *row[1:])


def _header(column: Column) -> str:
    """Return the headers a column may have, the unit of the documentation first."""
    first, *others = column.headers
    return f"`{first}`" + "".join(f", `{other}`" for other in others)


def _sheets() -> str:
    return _table(
        ("sheet", "needed", "what it holds", "its required columns"),
        (
            (
                f"`{sheet.name}`",
                "yes" if sheet.required else "",
                sheet.meaning,
                ", ".join(f"`{c.key}`" for c in sheet.columns if c.required),
            )
            for sheet in INPUT.values()
        ),
    )


def _limits() -> str:
    rows = []
    for setting in sheet_settings():
        meta, value = setting.metadata, setting.default
        unit = "" if meta["unit"] == "-" else f" {meta['unit']}"
        default = "blank" if value is None else f"{value:g}{unit}"
        rows.append((f"`{setting.name}`", default, meta["meaning"], meta["source"]))
    return _table(("limit", "default", "meaning", "where the default comes from"), rows)


def _input(sheet: Sheet) -> str:
    plain = [c for c in sheet.columns if not _MATRIX.fullmatch(c.name)]
    rows = [(_header(c), c.meaning, _unit(c), _blank(c), _allowed(c)) for c in plain]
    for letter in "rxb":
        family = [c for c in sheet.columns if _MATRIX.fullmatch(c.name) and c.name[0] == letter]
        if family:
            units = ", ".join(family[0].units).replace("_", " ")
            names = ", ".join(f"`{c.key}`" for c in family)
            rows.append(
                (names, family[0].meaning.rsplit(" ", 1)[0], units, "", _allowed(family[0]))
            )
    header = ("column", "meaning", "unit", "if blank", "allowed")
    return _details(f"{sheet.name}: {sheet.meaning}", _table(header, rows))


def _unit(column: Column) -> str:
    if column.units:
        return ""  # it stands in the header
    return "" if column.unit == "-" else column.unit


def _blank(column: Column) -> str:
    if column.required:
        return "**required**"
    if column.default is None:
        return ""
    return f"{column.default:g}" if isinstance(column.default, float) else str(column.default)


def _allowed(column: Column) -> str:
    if column.choices:
        return ", ".join(f"`{choice}`" for choice in column.choices)
    if column.kind == PHASES:
        return "`A`, `BC`, `ABC` ..."
    if column.kind != NUMBER:
        return ""
    bounds = (("at least", column.lowest), ("above", column.above), ("at most", column.highest))
    parts = [f"{word} {bound:g}" for word, bound in bounds if bound is not None]
    return " ".join([*parts, *(f"or `{word}`" for word in column.words)])


if __name__ == "__main__":
    README.write_text(renewed(README.read_text(encoding="utf-8")), encoding="utf-8")
