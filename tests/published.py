"""Published test feeders as workbook tables, with the figures printed for them.

The branch and load data in ``tests/data`` are those of the papers named here.  Everywhere:
source at node 1 held at 1.0 pu, constant-power load, no charging, and no ampacities (the papers
give none: ``unlimited``).
"""

from __future__ import annotations

import csv
from dataclasses import dataclass
from pathlib import Path

Row = dict[str, object]
DATA = Path(__file__).parent / "data"


@dataclass(frozen=True)
class Published:
    """What the literature prints for a feeder.

    Losses as printed (kW, kvar; None: not printed), lowest voltage and its node.  ``known``
    says how the figures reached these tests: ``seen quoted`` (in other publications) or
    ``memory``; none was read in the paper itself.
    """

    kv: float
    loss_kw: str
    loss_kvar: str | None
    v_min: str
    v_min_node: str
    paper: str
    known: str


# Figures are strings, so that the last printed digit stays known.
PUBLISHED = {
    "feeder10": Published(
        23.0, "783.77", "1036.5", "0.8375", "10",
        "Grainger & Lee; Baghzouz & Ertem, IEEE Trans. Power Delivery 5(4), 1990",
        "memory (branch and load data too)",
    ),
    "feeder12": Published(
        11.0, "20.71", None, "0.9434", "12",
        "Das, Nagi & Kothari, IEE Proc. C 141(4), 1994",
        "memory",
    ),
    "feeder15": Published(
        11.0, "61.79", "57.3", "0.9445", "13",
        "Das, Kothari & Kalam, Int. J. Electrical Power & Energy Systems 17(5), 1995",
        "memory",
    ),
    "feeder33": Published(
        12.66, "202.67", "135.14", "0.9131", "18",
        "Baran & Wu, IEEE Trans. Power Delivery 4(2), 1989, 1401-1407",
        "seen quoted",
    ),
    "feeder34": Published(
        11.0, "221.72", None, "0.9417", "27",
        "Chis, Salama & Jayaram, IEE Proc. Gener. Transm. Distrib. 144(3), 1997",
        "memory (branch and load data too)",
    ),
    "feeder69": Published(
        12.66, "225.0", "102.17", "0.9092", "65",
        "Baran & Wu, IEEE Trans. Power Delivery 4(1), 1989, 725-734",
        "seen quoted",
    ),
}  # fmt: skip

# A second 33-bus feeder is in print, which differs in branch 7-8 only; its figures must never
# be mixed with those of the first.
FEEDER33_B_BRANCH = ("7", "8", 1.7114, 1.2351)
FEEDER33_B_LOSS_KW = 210.998  # computed for this project; the literature prints 210.99 to 211.2
# Loss-minimising PV on variant B: bus 6, 2.59 MW, 111.03 kW (Acharya, Mahat & Mithulananthan,
# IJEPES 28, 2006 and later papers; quoted from memory; 2.5902 MW recomputed for this project).
FEEDER33_B_LEAST_LOSS = {"node": "6", "kw": 2590.2, "loss_kw": 111.03}
# Lowest-loss switching of the 33-bus feeder (paper: Baran & Wu 1989; 139.55 kW seen quoted, the
# five open branches from memory).
FEEDER33_LEAST_LOSS_OPEN = (("7", "8"), ("9", "10"), ("14", "15"), ("32", "33"), ("25", "29"))
FEEDER33_LEAST_LOSS_KW = "139.55"


def published_feeder(
    feeder: str,
    *,
    variant_b: bool = False,
    load_scale: float = 1.0,
    limits: dict[str, float] | None = None,
    open_branches: tuple[tuple[str, str], ...] | None = None,
) -> dict[str, list[Row]]:
    """Return a published feeder in workbook form.

    Parameters
    ----------
    feeder : str
        Name in ``PUBLISHED``.
    variant_b : bool
        The other 33-bus feeder (branch 7-8 = 1.7114 + j1.2351 ohm).
    load_scale : float
        Load scale of its single case, in which pv and ev run at full rating.
    limits : dict, optional
        Rows of ``limits``.
    open_branches : tuple of (from, to), optional
        The open ones, in place of the feeder's ties.
    """
    lines = _branches(feeder, "branches") + _branches(feeder, "ties_open")
    ties = len(_branches(feeder, "ties_open"))
    for k, line in enumerate(lines):
        ends = (line["from_node"], line["to_node"])
        shut = k < len(lines) - ties if open_branches is None else ends not in open_branches
        line["state"] = "closed" if shut else "open"
        if variant_b and ends == FEEDER33_B_BRANCH[:2]:
            line["r1_ohm"], line["x1_ohm"] = FEEDER33_B_BRANCH[2:]
    loads: list[Row] = [
        {"node": r["bus"], "kw": float(r["p_kw"]), "kvar": float(r["q_kvar"])}
        for r in _read(f"{feeder}_loads.csv")
    ]
    case: Row = {"case": "only", "load_scale": load_scale, "pv_scale": 1.0, "ev_scale": 1.0}
    return {
        "source": [{"node": "1", "kv": PUBLISHED[feeder].kv, "voltage_pu": 1.0, "feeder": feeder}],
        "lines": lines,
        "loads": loads,
        "cases": [case],
        "limits": [{"limit": k, "value": v} for k, v in (limits or {}).items()],
    }


def _branches(feeder: str, part: str) -> list[Row]:
    path = f"{feeder}_{part}.csv"
    if not (DATA / path).exists():
        return []
    return [
        {
            "line": f"{r['from']}-{r['to']}",
            "from_node": r["from"],
            "to_node": r["to"],
            "r1_ohm": float(r["r_ohm"]),
            "x1_ohm": float(r["x_ohm"]),
            "rating_a": "unlimited",
        }
        for r in _read(path)
    ]


def _read(path: str) -> list[dict[str, str]]:
    with (DATA / path).open(newline="", encoding="utf-8") as file:
        return list(csv.DictReader(file))
