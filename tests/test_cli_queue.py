"""The command `screen`: answers in order, exit codes, letters, and a run that is taken up again."""

from __future__ import annotations

import os
import re
from pathlib import Path
from typing import Any

import pytest

from command_line import rows_of, run, tables, write


@pytest.fixture
def feeder(tmp_path: Path) -> Path:
    return write(tmp_path)


def asked_for(folder: Path, **changed: Any) -> Path:
    """Return the feeder with its second request changed."""
    first, second = tables()["requests"]
    return write(folder, tables(requests=[first, second | changed]))


def test_screen_answers_in_order_and_zero(feeder, tmp_path):
    done = run("screen", feeder, "-q", "-o", tmp_path / "r.xlsx")
    assert (done.exit_code, done.output) == (0, "")
    first, second = rows_of(tmp_path / "r.xlsx", "requests")
    assert (first["request"], first["fits_kw"]) == ("Q1", 900)
    # Light case: 60 A at 12.47 kV is 1295.9 kVA, of which 900 kW are taken by Q1 and 0.3 x 200 kW
    # are used on the way; what is left is less than the 900 kW of Q2.
    assert (second["answer"], second["criterion"], second["element"]) == (
        "fits_up_to", "line_rating", "L1",
    )  # fmt: skip
    assert second["fits_kw"] == pytest.approx(1295.9 - 900 + 60, abs=6)
    assert (second["proof"], second["depends_on"]) == ("proven", "Q1")
    assert not list(tmp_path.glob("*.journal"))


def test_independent_requests_do_not_see_each_other(feeder, tmp_path):
    for name, options in (("one", ["--independent"]), ("two", ["--reserve", "none"])):
        run("screen", feeder, "-q", "-o", tmp_path / f"{name}.xlsx", *options)
    one, two = (rows_of(tmp_path / f"{name}.xlsx", "requests") for name in ("one", "two"))
    assert one == two
    assert [r["fits_kw"] for r in one] == [900, 900]


def test_a_request_with_a_fault_is_answered_and_answers_four(tmp_path):
    done = run("screen", asked_for(tmp_path, node="Z"), "-o", tmp_path / "r.xlsx")
    assert done.exit_code == 4
    first, second = rows_of(tmp_path / "r.xlsx", "requests")
    assert first["fits_kw"] == 900
    assert (second["answer"], second["fits_kw"], second["proof"]) == ("data_fault", None, None)
    assert run("host", tmp_path / "feeder.xlsx", "-q", "-o", tmp_path / "h.xlsx").exit_code == 0


def test_a_queue_without_open_requests_is_a_usage_error(tmp_path):
    requests = [row | {"status": "withdrawn"} for row in tables()["requests"]]
    done = run("screen", write(tmp_path, tables(requests=requests)), "-o", tmp_path / "r.xlsx")
    assert (done.exit_code, done.stdout) == (2, "")
    assert "no open request" in done.stderr


def test_answers_are_not_lost_where_the_output_cannot_be_written(feeder, tmp_path):
    out = tmp_path / "r.xlsx"
    out.mkdir()
    done = run("screen", feeder, "-o", out)
    assert (done.exit_code, done.stdout) == (1, "")
    (line,) = done.stderr.splitlines()
    assert line.startswith(f"feederhost: cannot write {out}")
    journal = tmp_path / "r.xlsx.journal"
    assert len(journal.read_text(encoding="utf-8").splitlines()) == 3
    out.rmdir()
    assert run("screen", feeder, "-q", "-o", out, "--resume").exit_code == 0
    assert not journal.exists()
    run("screen", feeder, "-q", "-o", tmp_path / "new.xlsx")
    assert rows_of(out, "requests") == rows_of(tmp_path / "new.xlsx", "requests")


def test_one_letter_per_request(feeder, tmp_path):
    run("screen", feeder, "-q", "-o", tmp_path / "r.xlsx", "--letters", tmp_path / "letters")
    assert sorted(os.listdir(tmp_path / "letters")) == ["0001_Q1.txt", "0002_Q2.txt"]
    text = (tmp_path / "letters" / "0002_Q2.txt").read_text(encoding="utf-8")
    assert text.startswith("Draft for the engineer's review")
    # Other customers appear as a number and a sum, never by name.
    assert re.search(r"1 earlier requests?, 900 kW", " ".join(text.split()))
    assert "Q1" not in text
