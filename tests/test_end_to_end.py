"""From a feeder to the written answer: 118 nodes, and the feeders that come with the project."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import pytest
from click.testing import CliRunner
from feederhost.cli import main
from feederhost.proof.program import compile_programme
from feederhost.schema import RESULT
from feederhost.sheets.reading import read_workbook
from feederhost.sheets.template import write_input
from feederhost.sheets.writing import write_result
from feederhost.study.load import load_feeder
from feederhost.study.nodal import Hosting, host
from feederhost.study.options import Options
from feederhost.study.reports import Report, host_report

from engine import swap
from judge import first_violation

FEEDERS = Path(__file__).parents[1] / "feeders"
HOST_SHEETS = [
    "summary", "hosting", "criteria", "relaxation", "conditions", "audit", "base", "base_cases",
    "profile", "run", "timing",
]  # fmt: skip


def long_feeder() -> dict[str, list[dict[str, Any]]]:
    """Return an invented feeder of 118 nodes at 12.47 kV.

    A trunk of 22 nodes, on every second a lateral of 4, at each of the 44 lateral nodes and at
    7 of the trunk a service transformer; homes and shops, two cases, a little PV.
    """
    tables: dict[str, list[dict[str, Any]]] = {
        "source": [{"node": "S", "kv": 12.47, "voltage_pu": 0.98, "feeder": "long",
                    "data_date": "2026-11-01", "transformer_kva": 12000}],
        "conductors": [
            {"conductor": "trunk", "r1_ohm_per_km": 0.21, "x1_ohm_per_km": 0.38, "rating_a": 450},
            {"conductor": "lateral", "r1_ohm_per_km": 0.7, "x1_ohm_per_km": 0.45, "rating_a": 180},
        ],
        "lines": [], "transformers": [], "loads": [],
        "generators": [{"node": "H5-2", "kw": 30}, {"node": "T14", "kw": 200}],
        "cases": [
            {"case": "evening", "load_scale": 1.0, "ev_scale": 1.0, "load_scale.shop": 0.6},
            {"case": "noon", "load_scale": 0.35, "pv_scale": 1.0, "load_scale.shop": 0.8},
        ],
    }  # fmt: skip

    def line(name: str, start: str, conductor: str, metres: float) -> None:
        tables["lines"].append({"line": f"L{name}", "from_node": start, "to_node": name,
                                "conductor": conductor, "length_m": metres})  # fmt: skip

    def service(node: str, low: str, kva: float, kind: str) -> None:
        tables["transformers"].append({
            "transformer": f"X{low}", "from_node": node, "to_node": low, "kva": kva,
            "kv_primary": 12.47, "kv_secondary": 0.48, "z_pct": 2.4, "x_over_r": 1.8,
        })  # fmt: skip
        tables["loads"].append({"node": low, "kw": round(0.55 * kva, 1), "power_factor": 0.95,
                                "class": kind})  # fmt: skip

    for i in range(1, 23):
        line(f"T{i}", f"T{i - 1}" if i > 1 else "S", "trunk", 160 + 15 * (i % 5))
        if i % 2 == 0:
            branch = i // 2
            for k in range(1, 5):
                node = f"B{branch}-{k}"
                line(node, f"B{branch}-{k - 1}" if k > 1 else f"T{i}", "lateral",
                     140 + 20 * ((branch + k) % 4))  # fmt: skip
                service(node, f"H{branch}-{k}", (50, 75, 100)[(branch + k) % 3], "home")
        if i % 3 == 0:
            service(f"T{i}", f"P{i}", 150, "shop")
    return tables


@pytest.fixture(scope="module")
def solved(tmp_path_factory: pytest.TempPathFactory) -> tuple[Hosting, int, Path]:
    """Return the answer, how often a programme was compiled for it, and the workbook."""
    path = tmp_path_factory.mktemp("long") / "long.xlsx"
    write_input(long_feeder(), path)
    compiled = []

    def counting(*given: Any, **more: Any) -> Any:
        compiled.append(given)
        return compile_programme(*given, **more)

    with pytest.MonkeyPatch.context() as monkeypatch:
        swap(monkeypatch, compile_programme, counting)
        answer = host(load_feeder(path).feeder, Options())
    return answer, len(compiled), path


def test_every_row_of_118_nodes_is_solved_and_proven(solved: tuple[Hosting, int, Path]) -> None:
    answer, _, _ = solved
    assert len(answer.feeder.nodes) == 118
    assert len(answer.rows) == 2 * 117
    assert {(str(r.state), str(r.proof)) for r in answer.rows} == {("hosted", "proven")}
    gaps = []
    for row in answer.rows:
        assert row.evidence is not None
        assert row.evidence.relaxed is not None
        gaps.append(abs(row.evidence.relaxed.g / row.rating - 1))
    assert max(gaps) <= 1e-4
    # Several limits take their turn, or the feeder would show little.
    assert {str(r.criterion) for r in answer.rows} >= {
        "voltage_low", "voltage_change", "transformer_rating", "line_rating",
    }  # fmt: skip


def test_programmes_are_compiled_once_a_direction_at_most(
    solved: tuple[Hosting, int, Path],
) -> None:
    _, compiled, _ = solved
    assert 1 <= compiled <= 2


@pytest.mark.parametrize("node", ["T1", "T22", "B11-4", "H1-1", "H6-3", "P18"])
def test_the_judge_agrees_on_118_nodes(solved: tuple[Hosting, int, Path], node: str) -> None:
    answer, _, _ = solved
    for row in answer.rows:
        if answer.feeder.nodes[row.candidate.node] == node:
            judged = first_violation(
                long_feeder(), node, row.candidate.technology, every_criterion=False
            )
            assert answer.feeder.kw(row.rating) == pytest.approx(judged.hosting_kw, rel=1e-3)
            assert str(row.criterion) == judged.criterion


@pytest.fixture(scope="module")
def written(
    solved: tuple[Hosting, int, Path], tmp_path_factory: pytest.TempPathFactory
) -> tuple[Report, Path]:
    """Return the report on a part of the nodes, and the result workbook."""
    out = tmp_path_factory.mktemp("out") / "result.xlsx"
    answer = host_report(solved[2], Options(nodes=("T22", "H6-3", "P18")))
    write_result(answer.tables, out)
    return answer, out


def test_every_sheet_is_there_when_read_back(written: tuple[Report, Path]) -> None:
    answer, out = written
    assert answer.exit_code == 0
    back = read_workbook(out).tables
    assert [s for s in back if s in RESULT] == HOST_SHEETS
    for sheet, table in answer.tables.items():
        assert [h for h in back[sheet] if h in RESULT[sheet].names] == list(RESULT[sheet].names)
        assert len(back[sheet]) == len(table)


def test_figures_are_those_of_the_report_when_read_back(written: tuple[Report, Path]) -> None:
    answer, out = written
    back = read_workbook(out).tables["hosting"].to_dict("records")
    kept = ("node", "technology", "state", "hosting_kw", "hosting_unrounded_kw", "proof",
            "criterion", "element", "case", "limit_value")  # fmt: skip
    assert [[r[k] for k in kept] for r in back] == [
        [r[k] for k in kept] for r in answer.tables["hosting"].to_dict("records")
    ]


@pytest.mark.parametrize("name", ["sedge_hollow", "cooper_quay"])
def test_the_sound_demo_feeders_are_proven_throughout(name: str, tmp_path: Path) -> None:
    out = tmp_path / "r.xlsx"
    done = CliRunner().invoke(main, ["host", str(FEEDERS / f"{name}.xlsx"), "-o", str(out), "-q"])
    assert (done.exit_code, done.stdout) == (0, "")
    rows = read_workbook(out).tables["hosting"].to_dict("records")
    assert len(rows) > 10
    assert {r["proof"] for r in rows} <= {"proven", "not_needed"}
    assert "proven" in {r["proof"] for r in rows}


def test_the_dirty_demo_feeder_is_refused(tmp_path: Path) -> None:
    out = tmp_path / "r.xlsx"
    path = FEEDERS / "mothwick_raw.xlsx"
    done = CliRunner().invoke(main, ["host", str(path), "-o", str(out), "-q"])
    assert (done.exit_code, done.stdout) == (3, "")
    back = read_workbook(out).tables
    assert list(back) == ["audit"]
    fatal = [r for r in back["audit"].to_dict("records") if r["severity"] == "fatal"]
    # One a line on standard error, and what is the matter as a whole.
    assert len(done.stderr.splitlines()) == len(fatal) + 1
    assert len(fatal) >= 5
