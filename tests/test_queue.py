"""The queue answered in order: reservation, answers, dependence, consistency by AC."""

from __future__ import annotations

import json
import math
from dataclasses import replace
from functools import lru_cache

import numpy as np
import pytest
from feederhost.errors import UsageError
from feederhost.schema import Answer, Criterion, Proof
from feederhost.study.options import Options
from feederhost.study.queue import answers as answers_room
from feederhost.study.queue.answers import Answered, Bench, answer, judge, set_up
from feederhost.study.queue.sheets import lay_out
from feederhost.study.queue.stops import least_slack

from engine import answer as hosted
from engine import load, row_of
from judge import worst_slack

NO_REMEDIES = Options(remedies=False)


def feeder(*requests: dict, **sheets: list[dict]) -> dict[str, list[dict]]:
    """Return a 11 kV feeder of a trunk S-A-B-C with a branch A-D, 1.5 MW of load, two cases."""
    lines = [
        {"line": f"L{n}", "from_node": a, "to_node": b, "length_km": km, "r1_ohm_per_km": 0.4,
         "x1_ohm_per_km": 0.4, "rating_a": 250}
        for n, (a, b, km) in enumerate(
            [("S", "A", 2.0), ("A", "B", 2.0), ("B", "C", 2.0), ("A", "D", 3.0)], 1
        )
    ]  # fmt: skip
    return {
        "source": [{"node": "S", "kv": 11, "short_circuit_mva": 90}],
        "lines": lines,
        "loads": [{"node": n, "kw": 375, "power_factor": 0.95} for n in "ABCD"],
        "cases": [
            {"case": "peak", "load_scale": 1, "ev_scale": 1, "basis": "measured"},
            {"case": "light", "load_scale": 0.3, "pv_scale": 1, "basis": "estimated"},
        ],
        # Off, so that voltages and ratings bind; its own test turns it on.
        "limits": [{"limit": "voltage_change_mv_pct", "value": 0}],
        "requests": list(requests),
    } | sheets


def ask(name: str, node: str, kw: float, technology: str = "pv", **more: object) -> dict:
    """Return one row of `requests`; its id is its date too."""
    day = {"received": f"2026-01-{int(name[1:]):02d}"}
    return {"request": name, "node": node, "technology": technology, "kw": kw} | day | more


@lru_cache(maxsize=32)
def _run(asked: str, options: Options) -> tuple[Bench, list[Answered]]:
    bench = set_up(load(json.loads(asked)), options)
    answers: list[Answered] = []
    for at in range(len(bench.line.sites)):
        answers.append(answer(bench, at, answers))
    return bench, answers


def run(tables: dict, options: Options = NO_REMEDIES) -> tuple[Bench, list[Answered]]:
    """Answer the queue of tables."""
    return _run(json.dumps(tables, sort_keys=True), options)


def kw(bench: Bench, value: float) -> float:
    return bench.loaded.feeder.kw(value)


def alone(node: str, technology: str) -> float:
    """Hosting of a node with nothing in the queue, unrounded kW."""
    tables = feeder()
    tables.pop("requests")
    hosting = hosted(tables)
    return hosting.feeder.kw(row_of(hosting, node, technology).rating)


def test_a_request_of_the_hosting_fits_and_one_just_above_does_not():
    for node, technology in (("C", "pv"), ("D", "ev"), ("A", "pv")):
        limit = alone(node, technology)
        _, (fitting,) = run(feeder(ask("Q1", node, math.floor(limit), technology)))
        assert fitting.answer in (Answer.FITS, Answer.FITS_SCREENS_OPEN)
        bench, (short,) = run(feeder(ask("Q1", node, 1.001 * limit, technology)))
        assert short.answer is Answer.FITS_UP_TO
        assert short.proof is Proof.PROVEN
        assert kw(bench, short.fits) == math.floor(limit)
        assert kw(bench, short.stop.rating) == pytest.approx(limit, rel=1e-6)
        # The same by the independent judge: feasible at the value, violated just above.
        tables = feeder() | {"requests": []}
        assert min(worst_slack(tables, node, technology, math.floor(limit)).values()) >= 0
        assert min(worst_slack(tables, node, technology, 1.001 * limit).values()) < 0


def test_the_queue_goes_by_date_then_by_row():
    rows = [ask("Q3", "A", 10), ask("Q1", "A", 10), ask("Q2", "A", 10),
            ask("Q4", "A", 10) | {"received": ""}, ask("Q5", "A", 10)]  # fmt: skip
    rows[4]["received"] = "2026-01-01"  # the day of Q1, a later row
    _, answers = run(feeder(*rows))
    assert [a.site.request for a in answers] == ["Q1", "Q5", "Q2", "Q3", "Q4"]
    assert [a.site.order for a in answers] == [1, 2, 3, 4, 5]
    assert "no date received: judged last" in answers[-1].site.flags


def test_earlier_requests_take_what_later_ones_find():
    limit = alone("C", "pv")
    first = ask("Q1", "C", math.floor(0.8 * limit))
    bench, (a, b) = run(feeder(first, ask("Q2", "C", math.floor(0.8 * limit))))
    assert a.answer in (Answer.FITS, Answer.FITS_SCREENS_OPEN)
    assert b.answer is Answer.FITS_UP_TO
    assert b.depends_on == ("Q1",)
    assert b.proof is Proof.PROVEN
    # A twin at the same node: together they host what one hosts alone.
    assert kw(bench, a.fits + b.stop.rating) == pytest.approx(limit, rel=1e-6)


@pytest.mark.parametrize(
    ("reserve", "held"), [("fitting", "fits"), ("asked", "asked"), ("none", "none")]
)
def test_the_size_reserved_is_what_the_option_says(reserve, held):
    big = ask("Q1", "C", math.floor(2 * alone("C", "pv")))
    bench, (a, b) = run(feeder(big, ask("Q2", "D", 50)), replace(NO_REMEDIES, reserve=reserve))
    assert a.answer is Answer.FITS_UP_TO
    wanted = {"fits": a.fits, "asked": a.site.asked, "none": 0.0}[held]
    assert a.reserved == wanted
    assert kw(bench, wanted) == pytest.approx(
        {"fits": kw(bench, a.fits), "asked": big["kw"], "none": 0}[held]
    )
    if reserve == "asked":
        # The size asked breaks a limit already: nothing more fits behind it.
        assert b.answer is Answer.DOES_NOT_FIT
        assert b.fits == 0.0


def test_what_stands_behind_a_request_that_does_not_fit_is_provisional():
    tables = feeder(
        ask("Q1", "NOWHERE", 10), ask("Q2", "A", 10), ask("Q3", "B", 10),
    )  # fmt: skip
    _, (a, b, c) = run(tables)
    assert a.answer is Answer.DATA_FAULT
    assert a.reserved == 0.0
    assert b.provisional_on == c.provisional_on == ("Q1",)
    _, (_, b, _) = run(tables, replace(NO_REMEDIES, reserve="asked"))
    assert b.provisional_on == ()


@pytest.mark.parametrize(
    ("earlier", "later"), [("ev", "pv"), ("pv", "ev"), ("storage", "pv"), ("storage", "ev")]
)
def test_the_opposite_direction_never_helps(earlier, later):
    # What fits behind an earlier request is never more than what fits without it.
    limit = alone("C", later)
    _, (before,) = run(feeder(ask("Q2", "C", 2 * limit, later)))
    cases = [
        {"case": "both", "load_scale": 0.5, "pv_scale": 1, "ev_scale": 1},
    ]
    for extra in ({}, {"cases": cases}):
        _, (alone_,) = run(feeder(ask("Q2", "C", 2 * limit, later), **extra))
        _, (_, behind) = run(
            feeder(ask("Q1", "C", 200, earlier), ask("Q2", "C", 2 * limit, later), **extra)
        )
        assert behind.stop.rating <= alone_.stop.rating * (1 + 1e-9)
    assert before.answer is Answer.FITS_UP_TO


def queue_of(seed: int, count: int) -> list[dict]:
    rng = np.random.default_rng(seed)
    kinds = ["pv", "ev", "pv", "storage"]
    return [
        ask(f"Q{n}", str(rng.choice(list("ABCD"))), float(rng.integers(200, 2500)), kinds[n % 4])
        for n in range(1, count + 1)
    ]


@pytest.mark.parametrize("seed", [1, 2, 3])
def test_removing_a_request_that_is_not_named_changes_nothing(seed):
    rows = queue_of(seed, 8)
    bench, answers = run(feeder(*rows))
    named = 0
    for at, own in enumerate(answers):
        earlier = {i: a.reserved for i, a in enumerate(answers[:at]) if a.reserved > 0}
        for i in earlier:
            others = {j: s for j, s in earlier.items() if j != i}
            again = judge(bench.line, bench.prover, at, others)
            same = (again.fits == own.fits) or kw(bench, abs(again.fits - own.fits)) < 1e-9
            word = again.answer is own.answer or {again.answer, own.answer} <= {
                Answer.FITS, Answer.FITS_SCREENS_OPEN}  # fmt: skip
            if answers[i].site.request in own.depends_on:
                named += 1
            else:
                assert same, (own.site.request, answers[i].site.request)
                assert word
    assert named > 0


@pytest.mark.parametrize("seed", [1, 2, 3, 4])
def test_all_reserved_requests_together_break_no_limit(seed):
    # Exports only and imports only: each request's own check has its earlier ones in place, so
    # the last one of each direction looks at all of them; here all at once.
    bench, answers = run(feeder(*queue_of(seed, 10)))
    for way in ("export", "import"):
        own = [i for i, a in enumerate(answers) if way in a.site.ways and a.reserved > 0]
        if not own:
            continue
        last = own[-1]
        others = {i: answers[i].reserved for i in own[:-1]}
        site = replace(
            bench.line.sites[last],
            parts=tuple(
                p for p in bench.line.sites[last].parts if p.technology.direction in (way, "both")
            ),
        )
        assert site.parts
        slack = least_slack(
            bench.line, last, np.array([answers[last].reserved]), [others]
        )  # fmt: skip
        assert slack[0] >= -1e-12


def test_a_request_beyond_the_search_cap_is_answered_not_capped():
    tables = feeder(ask("Q1", "A", 40_000))
    tables["limits"] = [{"limit": "search_cap_kw", "value": 100}]
    _, (a,) = run(tables)
    assert a.answer is Answer.FITS_UP_TO
    assert a.stop.criterion is not Criterion.SEARCH_CAP
    assert a.fits * 1e3 > 100


def test_one_inverter_caps_the_sum_of_a_site():
    limit = alone("C", "pv")
    share = math.floor(0.7 * limit)
    pv, more = ask("Q1", "C", share), ask("Q1", "C", share)
    _, (free,) = run(feeder(pv, more))
    assert free.answer is Answer.FITS_UP_TO
    assert free.site.asked * 1e3 == pytest.approx(2 * share)
    capped = {"inverter_kva": share}
    _, (behind,) = run(feeder(pv | capped, more | capped))
    # In steady state the inverter passes what one of them alone gives, and that fits.
    assert behind.fits == behind.site.asked


def test_storage_and_pv_behind_one_connection_are_judged_in_both_directions():
    pv, storage = ask("Q1", "C", 300), ask("Q1", "C", 20_000, "storage")
    _, (site,) = run(feeder(pv, storage))
    assert site.site.technology == "pv + storage"
    assert site.site.ways == ("export", "import")
    assert site.answer is Answer.FITS_UP_TO


def test_an_export_limit_holds_in_steady_state():
    limit = alone("C", "pv")
    asked = math.floor(2 * limit)
    _, (free,) = run(feeder(ask("Q1", "C", asked)))
    _, (held,) = run(feeder(ask("Q1", "C", asked, export_limit_kw=math.floor(0.5 * limit))))
    assert free.answer is Answer.FITS_UP_TO
    assert held.fits == held.site.asked


def test_the_swing_of_storage_counts_twice():
    # A 3 % change behind the source impedance: from full charge to full discharge the voltage
    # moves about twice as far as with a plant of the same size that starts or stops, and a
    # little more: charging pulls further down than discharging lifts.
    tables = feeder(ask("Q1", "C", 20_000, "storage"))
    tables["limits"] = [{"limit": "v_max_pu", "value": 1.2}, {"limit": "v_min_pu", "value": 0.7}]
    for line in tables["lines"]:
        line["rating_a"] = "unlimited"
    _, (storage,) = run(tables)
    tables["requests"] = [ask("Q1", "C", 20_000, "pv")]
    tables["cases"] = [{"case": "light", "load_scale": 0.3, "pv_scale": 1, "ev_scale": 0}]
    _, (pv,) = run(tables)
    assert storage.stop.criterion is pv.stop.criterion is Criterion.VOLTAGE_CHANGE
    assert storage.stop.swing
    assert storage.proof is Proof.AC_ONLY
    assert storage.stop.rating == pytest.approx(pv.stop.rating / 2, rel=0.15)


DIRTY = [
    (ask("Q1", "X9", 10), Answer.DATA_FAULT, "no node named X9"),
    (ask("Q2", "A", -5), Answer.DATA_FAULT, "not above 0"),
    (ask("Q3", "A", 10, "windmill"), Answer.DATA_FAULT, "no such technology"),
    (ask("Q4", "A", 10) | {"received": ""}, None, ""),
    (ask("Q5", "A", 10, kw_dc=10), None, ""),
    (ask("Q6", "S", 10), Answer.DATA_FAULT, "source"),
    (ask("Q7", "A", 10, status="withdrawn"), None, ""),
    (ask("Q8", "A", 40), None, ""),
]


def test_a_dirty_queue_is_answered_row_by_row():
    rows = [row for row, _, _ in DIRTY]
    rows += [ask("Q9", "A", 10), ask("Q9", "B", 10)]  # one id at two nodes
    built = [{"node": "A", "kw": 40, "technology": "pv"}]
    bench, answers = run(feeder(*rows, generators=built))
    by_name = {a.site.request: a for a in answers}
    assert "Q7" not in by_name
    assert any("Q7" in note for note in bench.notes)
    for row, word, text in DIRTY:
        own = by_name.get(row["request"])
        if own is None:
            continue
        if word is Answer.DATA_FAULT:
            assert own.answer is Answer.DATA_FAULT, row
            assert text in own.site.fault
            assert math.isnan(own.fits)
        else:
            assert own.answer is not Answer.DATA_FAULT, own.site.fault
            assert own.fits == own.site.asked
    assert "several nodes" in by_name["Q9"].site.fault
    assert by_name["Q5"].site.flags == ("kw may be the DC rating: kw_dc is not larger",)
    assert by_name["Q8"].site.flags == ("may stand in generators already (row 2)",)


def test_a_request_on_one_phase_is_not_judged_as_if_it_had_three():
    _, (one, three) = run(feeder(ask("Q1", "A", 10, phases="B"), ask("Q2", "A", 10, phases="CAB")))
    assert one.answer is Answer.DATA_FAULT
    assert "on phase B alone" in one.site.fault
    assert three.answer is not Answer.DATA_FAULT


def test_one_single_phase_row_makes_the_whole_site_a_fault():
    _, (site,) = run(feeder(ask("Q1", "A", 10), ask("Q1", "A", 10, "storage", phases="B")))
    assert site.answer is Answer.DATA_FAULT
    assert "on phase B alone" in site.site.fault


@pytest.mark.parametrize("kw_asked", [10, 40_000])
def test_an_answer_that_fails_its_ac_check_promises_nothing(monkeypatch, kw_asked):
    bench = set_up(load(feeder(ask("Q1", "A", kw_asked))), Options())
    monkeypatch.setattr(answers_room, "least_slack", lambda *_: np.array([-1.0, -1.0]))
    own = answer(bench, 0, [])
    assert (own.answer, own.proof) == (Answer.DOES_NOT_FIT, Proof.FAILED)
    assert math.isnan(own.fits)
    assert own.remedies == ()
    assert own.reserved == 0.0
    page = lay_out(bench.line, own, "")
    shown = page.request | page.queue
    assert [k for k in ("fits_kw", "remedy_kw", "head_room_kw") if shown.get(k) is not None] == []


def test_a_queue_without_requests_is_refused():
    with pytest.raises(UsageError, match="no open request"):
        run(feeder(ask("Q1", "A", 10, status="withdrawn")))


def test_a_broken_base_limit_is_charged_to_nobody():
    # A load that holds C below 0.95 with nothing added: EV there may worsen it by 0.002 pu.
    tables = feeder(ask("Q1", "C", 200, "ev"), ask("Q2", "C", 200, "ev"))
    tables["limits"] = [*tables["limits"], {"limit": "worsen_voltage_pu", "value": 0.002}]
    tables["loads"] = [{"node": "C", "kw": 3200, "power_factor": 0.95}]
    bench, (a, b) = run(tables)
    assert 0 < kw(bench, a.stop.rating) < 100
    # What the first has used of that allowance is gone for the second.
    assert b.stop.rating < a.stop.rating
