"""Names as engineers write them: headers folded, node names trimmed, near misses found."""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping

_BRACKETS = re.compile(r"[()\[\]{}]")
_BLANKS = re.compile(r"[\s_]+")
_MOST_SUGGESTIONS = 3
_LONGEST_NAME = 64  # longer texts are prose in the wrong cell, not misspelt names


def fold(header: str) -> str:
    """Return a header, class or limit name without case, blanks and brackets.

    ``Length (km)`` and ``length_km`` are the same header.
    """
    text = _BRACKETS.sub(" ", header.replace("\ufeff", " "))
    return _BLANKS.sub("_", text.strip().lower()).strip("_")


def within_one(first: str, second: str) -> bool:
    """Tell whether two words are at most one letter apart.

    One letter put in, left out or changed, or two neighbours swapped (Damerau, "A technique
    for computer detection and correction of spelling errors", Comm. ACM 7(3), 1964).
    """
    if len(first) > len(second):
        first, second = second, first
    start = 0
    while start < len(first) and first[start] == second[start]:
        start += 1
    rest, other = first[start:], second[start:]
    if len(first) < len(second):
        return rest == other[1:]
    swapped = rest[1::-1] + rest[2:]
    return rest[1:] == other[1:] or swapped == other


def near_index(names: Iterable[str]) -> dict[str, list[str]]:
    """Index names by themselves and by every way of leaving one letter out, case folded.

    Two words one letter apart always share an entry, so that a feeder of 10,000 nodes with as
    many unknown names is searched without comparing each with each.
    """
    index: dict[str, list[str]] = {}
    for name in dict.fromkeys(names):
        for part in _parts(name):
            index.setdefault(part, []).append(name)
    return index


def nearest(word: str, index: Mapping[str, list[str]]) -> list[str]:
    """Return up to three known names at most one letter from ``word``, case folded.

    Names that differ only by case shut out the others.
    """
    found = dict.fromkeys(name for part in _parts(word) for name in index.get(part, ()))
    folded = word.casefold()
    same = [name for name in found if name.casefold() == folded]
    near = same
    if not same and len(folded) > 1:  # every letter is one letter from every other
        near = [name for name in found if within_one(name.casefold(), folded)]
    return near[:_MOST_SUGGESTIONS]


def did_you_mean(word: str, index: Mapping[str, list[str]], otherwise: str = "") -> str:
    """Return the suggestion for an unknown name, or ``otherwise`` where none is near."""
    near = nearest(word, index)
    return f"did you mean {' or '.join(near)}?" if near else otherwise


def listed(names: Iterable[str], most: int = 8) -> str:
    """Return names as one text, cut after ``most`` of them."""
    names = list(names)
    text = ", ".join(names[:most])
    return f"{text} and {len(names) - most} more" if len(names) > most else text


def _parts(name: str) -> dict[str, None]:
    word = name.casefold()
    if len(word) > _LONGEST_NAME:
        return {word: None}
    shorter = (word[:i] + word[i + 1 :] for i in range(len(word)))
    return dict.fromkeys((word, *shorter))
