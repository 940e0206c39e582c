"""Rules across the cells of one row: lines, conductors, transformers, regulators, phases."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from feederhost.errors import Finding, Severity
from feederhost.feeder.columns import Checked, given, said_twice
from feederhost.feeder.names import did_you_mean, listed, near_index
from feederhost.schema import PHASE_PAIRS

_PER_KM = ("r1_ohm_per_km", "x1_ohm_per_km")
_TOTAL = ("r1_ohm", "x1_ohm")
_ZERO_PER_KM = ("r0_ohm_per_km", "x0_ohm_per_km")
_ZERO_TOTAL = ("r0_ohm", "x0_ohm")
_CHARGING = ("b1_us_per_km", "charging_uf_per_km")
# Zero sequence of a phase-modelled feeder where it is not given.
_ZERO_SEQUENCE_DEFAULT = {"r0": "2 r1", "x0": "3 x1"}


def line_rules(reads: Mapping[str, Checked]) -> list[Finding]:
    """Return the findings of `lines`: conductor, impedance, length and rating."""
    lines, library = reads["lines"], reads["conductors"]
    ratings = {cells["conductor"]: given(cells, "rating_a") for _, cells in library.rows()}
    unknown_ratings = {
        cells["conductor"] for row, cells in library.rows() if (row, "rating_a") in library.faulty
    }
    index = near_index(ratings)
    findings: list[Finding] = []
    overruled: list[str] = []
    for row, cells in lines.rows():
        conductor = cells["conductor"]
        if conductor and conductor not in ratings:
            findings.append(
                lines.finding(
                    Severity.FATAL, row, "conductor", "no such conductor in the library",
                    did_you_mean(conductor, index, "add it to `conductors`"),
                )
            )  # fmt: skip
        for per_km, total in zip(_PER_KM + _ZERO_PER_KM, _TOTAL + _ZERO_TOTAL, strict=True):
            findings += said_twice(lines, row, cells, per_km, total)
        findings += said_twice(lines, row, cells, *_CHARGING)
        for pair in (_PER_KM, _TOTAL, _ZERO_PER_KM, _ZERO_TOTAL):
            findings += _half_given(lines, row, cells, pair)
        explicit = given(cells, *_PER_KM, *_TOTAL)
        if conductor and explicit:
            overruled.append(cells["line"])
        findings += _length_rules(lines, row, cells, explicit)
        rated = given(cells, "rating_a") or (row, "rating_a") in lines.faulty
        known = (row, "conductor") in lines.faulty or conductor in unknown_ratings
        known = known or (conductor != "" and ratings.get(conductor, ["unknown"]) != [])
        if not rated and not known:
            findings.append(
                lines.finding(
                    Severity.FATAL, row, "rating_a", "no current rating, here or in `conductors`",
                    "give the rating in A, or write unlimited",
                )
            )  # fmt: skip
    if overruled:
        findings.append(
            lines.finding(
                Severity.NOTE, 0, "conductor",
                f"{len(overruled)} lines give a conductor and an impedance: the impedance is "
                f"taken ({listed(overruled)})",
            )
        )  # fmt: skip
    return findings


def _half_given(
    checked: Checked, row: int, cells: Mapping[str, Any], pair: tuple[str, str]
) -> list[Finding]:
    """Return a finding where a row gives a resistance without its reactance, or the reverse."""
    there = given(cells, *pair)
    missing = [key for key in pair if key not in there]
    if len(there) != 1 or (row, missing[0]) in checked.faulty:
        return []
    other = checked.headers.get(missing[0], missing[0])
    problem = f"{checked.headers[there[0]]} is given without {other}"
    default = _ZERO_SEQUENCE_DEFAULT.get(missing[0][:2])
    if default:
        return [
            checked.finding(Severity.WARNING, row, missing[0], problem, f"else {default} is taken")
        ]
    hint = "give resistance and reactance in the same form"
    return [checked.finding(Severity.FATAL, row, missing[0], problem, hint)]


def _length_rules(
    lines: Checked, row: int, cells: Mapping[str, Any], explicit: list[str]
) -> list[Finding]:
    length = given(cells, "length_km")
    per_length = given(cells, *_PER_KM, *_ZERO_PER_KM, *_CHARGING)
    if not explicit and cells["conductor"]:
        per_length.append("conductor")
    if per_length and not length and (row, "length_km") not in lines.faulty:
        what = lines.headers[per_length[0]]
        hint = "give the length, or the total impedance in r1_ohm and x1_ohm"
        return [lines.finding(Severity.FATAL, row, "length_km", f"{what} without a length", hint)]
    unread = any((row, key) in lines.faulty for key in (*_PER_KM, *_TOTAL, "conductor"))
    if unread or cells["state"] == "open":
        return []
    if cells["length_km"] > 0 and not explicit and not cells["conductor"]:
        problem = "a length and no impedance: taken as a switch, without voltage drop"
        hint = "give conductor or impedance, unless it is a switch"
        return [lines.finding(Severity.WARNING, row, "length_km", problem, hint)]
    if cells["length_km"] == 0 and per_length and not given(cells, *_TOTAL):
        problem = "a length of zero: taken as a switch"
        return [lines.finding(Severity.NOTE, row, "length_km", problem)]
    if len(explicit) > 1 and not any(cells[key] for key in explicit):
        problem = "an impedance of zero: taken as a switch"
        return [lines.finding(Severity.NOTE, row, explicit[0], problem)]
    return []


def conductor_rules(reads: Mapping[str, Checked]) -> list[Finding]:
    """Return the findings of `conductors`: sequence values or phase matrices, complete."""
    library = reads["conductors"]
    findings: list[Finding] = []
    for row, cells in library.rows():
        findings += _half_given(library, row, cells, _PER_KM)
        findings += _half_given(library, row, cells, _ZERO_PER_KM)
        findings += said_twice(library, row, cells, *_CHARGING)
        matrix = []
        for pair in PHASE_PAIRS:
            keys = (f"r_{pair}_ohm_per_km", f"x_{pair}_ohm_per_km")
            matrix += given(cells, *keys)
            findings += _half_given(library, row, cells, keys)
            if pair[0] == pair[1]:
                findings += [
                    library.finding(
                        Severity.FATAL, row, key, "negative, where that cannot be",
                        "check the diagonal of the phase matrix",
                    )
                    for key in given(cells, *keys, f"b_{pair}_us_per_km")
                    if cells[key] < 0
                ]  # fmt: skip
            else:
                findings += _mutual_rules(library, row, cells, pair)
        unread = any((row, key) in library.faulty for key in cells)
        if not given(cells, *_PER_KM) and not matrix and not unread:
            findings.append(
                library.finding(
                    Severity.FATAL, row, "r1_ohm_per_km", "a conductor without impedance",
                    "give r1 and x1, or a phase matrix",
                )
            )  # fmt: skip
    return findings


def _mutual_rules(library: Checked, row: int, cells: Mapping[str, Any], pair: str) -> list[Finding]:
    mutual = f"x_{pair}_ohm_per_km"
    own = [f"x_{phase}{phase}_ohm_per_km" for phase in pair]
    lacking = [key for key in own if not given(cells, key) and (row, key) not in library.faulty]
    if not given(cells, mutual) or not lacking:
        return []
    problem = f"a mutual impedance without {library.headers.get(lacking[0], lacking[0])}"
    return [
        library.finding(Severity.FATAL, row, mutual, problem, "give the diagonal of both phases")
    ]


def transformer_rules(reads: Mapping[str, Checked]) -> list[Finding]:
    """Return the findings of `transformers`: one complete pair of impedance figures."""
    checked = reads["transformers"]
    findings: list[Finding] = []
    nameplate, parts = ("z_pct", "x_over_r"), ("r_pct", "x_pct")
    for row, cells in checked.rows():
        if any((row, key) in checked.faulty for key in nameplate + parts):
            continue
        whole = [pair for pair in (nameplate, parts) if len(given(cells, *pair)) == 2]
        if not whole:
            begun = parts if given(cells, *parts) else nameplate
            missing = [key for key in begun if not given(cells, key)]
            problem = "the impedance is not complete"
            hint = "give z_pct and x_over_r, or r_pct and x_pct"
            findings.append(checked.finding(Severity.FATAL, row, missing[0], problem, hint))
        elif given(cells, *nameplate) and given(cells, *parts):
            other = parts if whole[0] == nameplate else nameplate
            problem = "the impedance is given twice, by z_pct or x_over_r and by r_pct or x_pct"
            extra = given(cells, *other)[0]
            findings.append(checked.finding(Severity.FATAL, row, extra, problem, "keep one pair"))
    return findings


def regulator_rules(reads: Mapping[str, Checked]) -> list[Finding]:
    """Return the findings of `regulators`: something to hold, taps within the range."""
    checked = reads["regulators"]
    findings: list[Finding] = []
    phase_taps, setpoints = ("tap_a", "tap_b", "tap_c"), ("setpoint_pu", "setpoint_kv")
    aims = ("tap", *phase_taps, *setpoints)
    for row, cells in checked.rows():
        findings += said_twice(checked, row, cells, *setpoints)
        taps = given(cells, "tap", *phase_taps)
        for key in phase_taps:
            findings += said_twice(checked, row, cells, "tap", key)
        if not given(cells, *aims) and not any((row, key) in checked.faulty for key in aims):
            problem = "neither a setpoint nor a tap"
            hint = "give setpoint_pu, or the tap in steps from neutral"
            findings.append(checked.finding(Severity.FATAL, row, "setpoint_pu", problem, hint))
        if taps and given(cells, *setpoints):
            problem = "a tap and a setpoint: the tap is taken and held"
            findings.append(checked.finding(Severity.NOTE, row, taps[0], problem))
        for key in taps:
            if abs(cells[key]) > cells["steps"] / 2:
                problem = f"a tap beyond the range of {cells['steps'] / 2:g} steps either way"
                hint = "give the tap in steps from neutral, lowering negative"
                findings.append(checked.finding(Severity.FATAL, row, key, problem, hint))
            elif not float(cells[key]).is_integer():
                findings.append(
                    checked.finding(Severity.WARNING, row, key, "a tap between two steps")
                )
        if cells["mode"] == "follow":
            problem = "taps that follow are not modelled: the taps found in the base run are held"
            findings.append(checked.finding(Severity.WARNING, row, "mode", problem))
        if not given(cells, "rating_a") and (row, "rating_a") not in checked.faulty:
            problem = "no current rating: the loading of this regulator is not checked"
            hint = "give the rating in A"
            findings.append(checked.finding(Severity.WARNING, row, "rating_a", problem, hint))
    return findings


def phase_rules(reads: Mapping[str, Checked]) -> list[Finding]:
    """Return the findings about phases cells that are blank, or of no use."""
    lines = reads["lines"]
    modelled = any(cells["phases"] for _, cells in lines.rows())
    findings: list[Finding] = []
    for name, checked in reads.items():
        if name == "lines" or "phases" not in checked.table.columns:
            continue
        blank = sum(
            not cells["phases"] and (row, "phases") not in checked.faulty
            for row, cells in checked.rows()
        )
        if modelled and blank:
            problem = f"blank in {blank} of {len(checked.table)} rows: the phases of the node"
            findings.append(checked.finding(Severity.NOTE, 0, "phases", problem))
        elif not modelled and any(checked.table["phases"].tolist()):
            problem = "phases are given here but on no line: the feeder is judged balanced"
            hint = "give the phases of the lines as well"
            findings.append(checked.finding(Severity.WARNING, 0, "phases", problem, hint))
    for row, cells in lines.rows() if modelled else ():
        if not cells["phases"] and (row, "phases") not in lines.faulty:
            problem = "blank, while other lines give their phases"
            hint = "give the phases of every line, or of none"
            findings.append(lines.finding(Severity.FATAL, row, "phases", problem, hint))
    return findings
