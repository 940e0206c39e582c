"""The result sheets."""

from __future__ import annotations

from dataclasses import dataclass

from feederhost.schema.words import LIMIT_CRITERIA


@dataclass(frozen=True)
class Output:
    """One result sheet: columns with the meaning shown as header comment, number formats."""

    name: str
    meaning: str
    columns: tuple[tuple[str, str], ...]
    banner: str = ""

    @property
    def names(self) -> tuple[str, ...]:
        """Column names in order."""
        return tuple(name for name, _ in self.columns)


RESULT: dict[str, Output] = {
    o.name: o
    for o in (
        Output("summary", "the run in one page", (("key", "what"), ("value", "its value"))),
        Output(
            "requests",
            "every request answered, in order",
            (
                ("request", "request id"),
                ("order", "place in the queue"),
                ("received", "date received"),
                ("node", "node it connects to"),
                ("technology", "technologies of the site"),
                ("phases", "phases; blank: balanced"),
                ("asked_kw", "AC rating asked for, kW"),
                (
                    "answer",
                    "fits, fits_screens_open, fits_with_remedy, fits_up_to, does_not_fit "
                    "or data_fault",
                ),
                ("fits_kw", "size that fits without a remedy, kW; blank where not published"),
                ("criterion", "what is met first as it grows"),
                ("element", "where that is"),
                ("case", "the case in which it is met"),
                ("value_at_limit", "measured quantity there"),
                ("limit_value", "the limit it meets"),
                ("unit", "unit of both"),
                ("proof", "how far the number can be trusted"),
                ("depends_on", "earlier requests whose removal alone would change the answer"),
                ("provisional_on", "earlier requests that do not fit as asked, or have a fault"),
                ("screens_failed", "rule screens that failed"),
                ("screens_open", "rule screens that lack data"),
                ("best_remedy", "first remedy that carries most"),
                ("remedy_kw", "size it carries, kW"),
                ("cost_low", "low end of its cost"),
                ("cost_high", "high end of its cost"),
                ("currency", "currency and price year"),
                ("input_grade", "worst basis of the data used"),
                ("flags", "what to know about this request"),
            ),
        ),
        Output(
            "screens",
            "rule screens of every request",
            (
                ("request", "request id"),
                ("screen", "name of the screen"),
                ("quantity", "measured quantity"),
                ("threshold", "threshold it is held to"),
                ("unit", "unit of both"),
                ("verdict", "pass, fail or not assessed"),
                ("missing", "what is missing where it is not assessed"),
                ("detail", "where, in which case, percent of what"),
                ("source", "where the rule stands"),
            ),
        ),
        Output(
            "remedies",
            "what would make a request fit, each re-proven by AC with the queue in place",
            (
                ("request", "request id"),
                ("remedy", "kind of remedy"),
                ("setting", "what would be set or built"),
                ("kw", "size it carries, kW"),
                ("criterion", "what stops it then; blank: carries what is asked"),
                ("proof", "how far the number can be trusted"),
                ("energy_lost_mwh", "energy lost in a year, MWh"),
                ("cost_low", "low end of the cost"),
                ("cost_high", "high end of the cost"),
                ("currency", "currency and price year"),
                ("note", "what to know about it"),
            ),
        ),
        Output(
            "queue",
            "what each request leaves for those behind it",
            (
                ("order", "place in the queue"),
                ("request", "request id"),
                ("reserved_kw", "size later requests find in place, kW"),
                ("head_room_kw", "what would still fit at its node beyond that, kW"),
            ),
        ),
        Output(
            "signoff",
            "assumptions and exceptions, for the engineer to accept or refuse",
            (
                ("assumption", "assumption or exception"),
                ("value", "its value"),
                ("accepted_by", "left for the engineer"),
                ("date", "left for the engineer"),
                ("reason", "left for the engineer"),
            ),
        ),
        Output(
            "hosting",
            "largest rating per node and technology, one at a time",
            (
                ("feeder", "feeder name"),
                ("node", "node the plant connects to"),
                ("technology", "technology asked about"),
                ("phases", "phases of the plant; blank: balanced"),
                ("kv", "nominal voltage of the node, kV line to line"),
                ("distance_km", "length of line from the source, km"),
                ("state", "what happened to this row"),
                ("hosting_kw", "largest rating, kW AC, rounded down; blank where not published"),
                ("hosting_kva", "the same with its reactive power, kVA"),
                ("hosting_unrounded_kw", "first violation before rounding, kW"),
                ("upper_bound_kw", "no operating point within the limits hosts more, kW"),
                ("gap_pct", "upper bound over value, minus one, percent"),
                ("proof", "how far the number can be trusted"),
                ("criterion", "the limit met first"),
                ("element", "where that limit is"),
                ("element_phase", "its phase; blank: balanced"),
                ("case", "the case in which it is met"),
                ("value_at_limit", "measured quantity at the unrounded value"),
                ("limit_value", "the limit it meets"),
                ("unit", "unit of both"),
                ("next_criterion", "the criterion met next"),
                ("next_kw", "rating at which it is met, kW"),
                ("existing_kw", "generation already at the node, kW"),
                ("reverse_at_head_kw", "rating at which the head first exports, any case, kW"),
                ("flags", "what to know about this row"),
                ("input_grade", "worst basis of the data used"),
                ("ac_mismatch_pu", "largest power mismatch of the AC check, pu on 1 MVA"),
                ("fictitious_loss_kw", "loss the relaxed solution invents, kW; blank: not solved"),
            ),
        ),
        Output(
            "criteria",
            "hosting if one criterion stood alone, kW; blank: not met up to the cap",
            (
                ("node", "node the plant connects to"),
                ("technology", "technology asked about"),
                ("phases", "phases of the plant; blank: balanced"),
                *((f"{c}_kw", f"first violation of {c} alone, kW") for c in LIMIT_CRITERIA),
            ),
        ),
        Output(
            "relaxation",
            "what the conic solver said",
            (
                ("node", "node the plant connects to"),
                ("technology", "technology asked about"),
                ("phases", "phases of the plant; blank: balanced"),
                ("case", "case the programme was posed for"),
                ("priced_kw", "optimum of the priced programme, kW"),
                ("solver", "solver that answered"),
                ("status", "its own word for the outcome"),
                ("iterations", "its iterations"),
                ("smallest_multiplier", "smallest cone multiplier over the largest"),
                ("objective_margin", "rise of the priced objective per unit of rating"),
                ("plain_kw", "optimum of the plain programme, kW: not a capacity"),
                ("plain_fictitious_loss_kw", "loss the plain programme invents, kW"),
                ("plain_outcome", "why the plain solution is not an operating point to publish"),
            ),
            banner="solver record: not a capacity",
        ),
        Output(
            "conditions",
            "conditions under which the relaxation is known to be exact",
            (
                ("scope", "feeder, or the row with the smallest margin"),
                ("condition", "what is asked"),
                ("holds", "yes, no or not needed"),
                ("margin", "how far from the boundary; positive holds"),
                ("where", "branch, node, row or case of the smallest margin"),
                ("reference", "where the condition is published"),
            ),
        ),
        Output(
            "audit",
            "what the audit noticed in the data",
            (
                ("severity", "fatal, warning or note"),
                ("sheet", "sheet"),
                ("row", "row as the spreadsheet shows it"),
                ("column", "column"),
                ("value", "what stands there"),
                ("finding", "what is the matter"),
                ("suggestion", "what to do"),
            ),
        ),
        Output(
            "base",
            "voltages with nothing added",
            (
                ("case", "case"),
                ("node", "node"),
                ("voltage_pu", "voltage, pu"),
                ("angle_deg", "angle, degrees"),
                ("violation", "limit broken with nothing added"),
            ),
        ),
        Output(
            "base_cases",
            "flows with nothing added, per case",
            (
                ("case", "case"),
                ("loss_kw", "active loss, kW"),
                ("loss_kvar", "reactive loss of the series impedances, kvar"),
                ("head_kw", "active power into the feeder, kW"),
                ("head_kvar", "reactive power into the feeder, kvar"),
                ("lowest_pu", "lowest voltage, pu"),
                ("lowest_node", "where"),
                ("highest_pu", "highest voltage, pu"),
                ("highest_node", "where"),
                ("worst_loading_pct", "largest share of a rating, percent"),
                ("worst_element", "where"),
                ("taps", "regulator taps found"),
            ),
        ),
        Output(
            "profile",
            "voltage against distance, at base and at the smallest hosting of each technology",
            (
                ("node", "node"),
                ("distance_km", "length of line from the source, km"),
                ("base_pu", "voltage with nothing added, pu"),
                ("hosting_pu", "voltage with the plant at its hosting, pu"),
                ("case", "binding case"),
                ("technology", "technology of the plant"),
                ("plant_node", "node of the plant"),
                ("v_min_pu", "lower limit of the node, pu"),
                ("v_max_pu", "upper limit of the node, pu"),
            ),
        ),
        Output("run", "versions, settings and tolerances", (("key", "what"), ("value", "value"))),
        Output("timing", "time stamps and wall times", (("key", "what"), ("value", "value"))),
    )
}
