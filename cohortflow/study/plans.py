"""[[scenario]] and [[adjustment]]: what may be done about it, and what is laid over by hand."""

from __future__ import annotations

from typing import Any

from cohortflow.states import ALL_LIVE
from cohortflow.study.forecast import Ground, amounts_by_state, later_than_base, move_of, repeated
from cohortflow.study.parts import Adjustment, ChangeSpec, ScenarioSpec
from cohortflow.study.source import Table

SCENARIO_KEYS = (
    "name",
    "case",
    "starts",
    "ends",
    "segment",
    "change",
    "cost_per_customer",
    "fixed_cost",
    "joiners_multiply",
    "per_period",
)
ADJUSTMENT_KEYS = ("period", "state", "customers", "reason", "approved_by")
CHANGE_KEYS = ("from", "to", "add", "multiply", "set", "balance")
_SIZES = {"add": (-1.0, 1.0), "multiply": (0.0, float("inf")), "set": (0.0, 1.0)}


def read_scenarios(tables: list[Table], ground: Ground) -> tuple[ScenarioSpec, ...]:
    """All [[scenario]] tables; their names differ."""
    scenarios = tuple(_scenario(table, ground) for table in tables)
    if twice := repeated([s.name for s in scenarios]):
        raise tables[-1].refuse("name", f"scenario names must differ; {twice} came more than once.")
    return scenarios


def _scenario(table: Table, ground: Ground) -> ScenarioSpec:
    changes = table.get("change", [], list, "a list of tables { from, to, add | multiply | set }")
    spec = ScenarioSpec(
        name=table.text("name"),
        change=tuple(_change(table.inner("change", item, CHANGE_KEYS), ground) for item in changes),
        case=table.text("case", None, choices=("low", "high")),
        starts=_ahead(table, "starts", ground),
        ends=_ahead(table, "ends", ground),
        segment=table.text("segment", None),
        cost_per_customer=table.number_of("cost_per_customer", 0.0),
        fixed_cost=table.number_of("fixed_cost", 0.0),
        joiners_multiply=table.number_of("joiners_multiply", 1.0, least=0.0),
        per_period=amounts_by_state(table, ground.states) if "per_period" in table else None,
    )
    _check_scenario(table, spec, ground)
    return spec


def _check_scenario(table: Table, spec: ScenarioSpec, ground: Ground) -> None:
    if spec.starts is not None and spec.ends is not None and spec.ends < spec.starts:
        raise table.refuse("ends", f"{table.data['ends']} lies before starts, {table.data['starts']}.")
    if not spec.change and spec.per_period is None and spec.joiners_multiply == 1.0:
        raise table.refuse("change", "missing; a scenario needs change, per_period or joiners_multiply.")
    if spec.segment is not None and not ground.input.segments:
        raise table.refuse("segment", f'"{spec.segment}" cannot be met: [input] segments names no column.')


def _ahead(table: Table, key: str, ground: Ground) -> int | None:
    label = table.text(key, None)
    if label is None:
        return None
    return later_than_base(table, key, table.attempt(key, ground.calendar.parse, label), ground)


def _change(table: Table, ground: Ground) -> ChangeSpec:
    given = [how for how in _SIZES if how in table]
    if len(given) != 1:
        raise table.refuse("add", f"a change takes exactly one of add, multiply, set; got {len(given)}.")
    how = given[0]
    low, high = _SIZES[how]
    origin, target = move_of(table, ground.states, extra=(ALL_LIVE,))
    size = table.number_of(how, least=low, most=high)
    return ChangeSpec(origin, target, how, size, _balance(table, target, ground))


def _balance(table: Table, target: str, ground: Ground) -> str | tuple[str, ...]:
    value: Any = table.get(
        "balance", "proportional", (str, list), '"proportional", a state, or a list of states'
    )
    if value == "proportional":
        return "proportional"
    names = table.texts("balance") if isinstance(value, list) else (value,)
    if not names:
        raise table.refuse("balance", 'is an empty list; name states or write "proportional".')
    for name in names:
        table.one_of("balance", name, ground.states.names, "state")
        if name == target:
            raise table.refuse("balance", f'"{target}" is the move being changed; it cannot balance itself.')
    return tuple(names)


def read_adjustments(tables: list[Table], ground: Ground) -> tuple[Adjustment, ...]:
    """All [[adjustment]] tables."""
    return tuple(_adjustment(table, ground) for table in tables)


def _adjustment(table: Table, ground: Ground) -> Adjustment:
    period = table.attempt("period", ground.calendar.parse, table.text("period"))
    return Adjustment(
        period=later_than_base(table, "period", period, ground),
        state=table.one_of("state", table.text("state"), ground.states.remaining, "state"),
        customers=table.number_of("customers"),
        reason=table.text("reason"),
        approved_by=table.get("approved_by", "", str, "a text"),
    )
