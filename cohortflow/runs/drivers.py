"""What two forecasts rest on, so that each ingredient can be taken from the one or from the other.

Both are seen from the later base period b. The earlier forecast, made at a <= b, arrives there by its own
rates, joiners and adjustments; the later one finds who has been counted.

    opening   who stands where at b: as forecast from a, or as counted
    segments  the weights of the segments in the pooled rates (and, in the segment model, in the base)
    joiners   joiners and returners after b
    rates     the rates of moves: counted up to a, or up to b
    model     the table [model]
    value     what a customer in a state, or a move, earns
    adjustments   manual overlays

All are worked out on the later run's counts, those up to a being the earlier forecast's. What the earlier
forecast would have said on these counts, less what it did say, is the restatement of data.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from cohortflow.chain import Chain, Schedule
from cohortflow.errors import NotIdentified
from cohortflow.estimator import Fit, fit
from cohortflow.projector.accept import weights_of
from cohortflow.projector.adjust import as_adjustments
from cohortflow.projector.amounts import observed_amounts
from cohortflow.projector.money import money_terms
from cohortflow.runs.course import Course, move_effects, quantities_of, way
from cohortflow.runs.opened import OpenRun
from cohortflow.runs.steps import joiners_study, model_options
from cohortflow.study import Study
from cohortflow.tally import Tally

Array = NDArray[np.float64]
OPENING, SEGMENTS, JOINERS, RATES, MODEL, VALUE, ADJUSTED = (
    "opening", "segments", "joiners", "rates", "model", "value", "adjustments",
)  # fmt: skip
GROUPS = (OPENING, SEGMENTS, JOINERS, RATES, MODEL, VALUE, ADJUSTED)
KINDS = ("joined", "returned")
CONTRIBUTION = "contribution"
Item = tuple[str, str, str]  # kind, from, to


@dataclass(frozen=True, eq=False)
class Hand:
    """One side's ingredients: its study, the counts it saw, and the periods it covers, base+1 .. base+H.

    joiners : kind -> (H, K);  added : (H, K) adjustments;  money : (K, K) y_ij, None without [value]
    """

    study: Study
    tally: Tally
    by: str | None
    joiners: Mapping[str, Array]
    added: Array
    money: Array | None

    @property
    def base(self) -> int:
        return self.tally.meta.last

    @classmethod
    def of(cls, study: Study, tally: Tally, by: str | None) -> Hand:
        coming = joiners_study(study, tally)
        plain = Chain(tally.states, np.eye(len(tally.states)), period=tally.calendar).schedule
        added = as_adjustments(study.adjustments, plain, tally.meta.last, study.horizon)
        return cls(
            study, tally, by, {kind: coming.expected(kind) for kind in KINDS}, added, _money(study, tally)
        )

    def coming(self) -> Array:
        """(H, K) joiners and returners."""
        return np.asarray(sum(self.joiners.values()))

    def fit(self, tally: Tally) -> Fit:
        """This side's model on any counts; periods that they do not hold cannot be excluded."""
        name, last = self.study.model.name, tally.meta.last
        exclude = tuple(p for p in self.study.model.exclude if tally.meta.first <= p <= last)
        by = self.by if name == "segment" else None
        return fit(tally, model=name, by=by, exclude=exclude, **model_options(self.study, name))


def _money(study: Study, tally: Tally) -> Array | None:
    spec = study.value
    if spec is None:
        return None
    try:
        amounts: Any = spec.per_period
        if amounts is None:
            amounts = observed_amounts(tally, margin=1.0 if spec.margin is None else spec.margin)
    except NotIdentified:
        return None
    return money_terms(tally.states, amounts, on_move=spec.on_move, timing=spec.timing).amounts()


@dataclass(frozen=True, eq=False)
class Drivers:
    """Both sides, on the later counts, and forecasts for b .. b+n made of any choice among them.

    A choice is the set of groups taken from the later side.
    """

    old: Hand
    new: Hand
    weights: Mapping[str, Array]
    column: str | None

    @classmethod
    def of(cls, earlier: OpenRun, later: OpenRun) -> Drivers:
        base = earlier.base
        cut = later.tally if base == later.base else later.tally.at_origin(base)
        old = Hand.of(earlier.study, cut, earlier.by)
        new = Hand.of(later.study, later.tally, later.by)
        shared = {n: m for n, m in later.study.totals.items() if earlier.study.totals.get(n) == m}
        return cls(old, new, weights_of(later.tally.states, shared), _column(earlier, later))

    @property
    def gap(self) -> int:
        """m: periods from the earlier base to the later one."""
        return self.new.base - self.old.base

    @property
    def steps(self) -> int:
        """n: periods after b that both cover."""
        return min(self.old.study.horizon - self.gap, self.new.study.horizon)

    @property
    def size(self) -> int:
        return len(self.new.tally.states)

    @cached_property
    def has_money(self) -> bool:
        """Whether both sides count money, and in one currency."""
        a, b = self.old.study.value, self.new.study.value
        same = a is not None and b is not None and a.currency == b.currency
        return same and self.old.money is not None and self.new.money is not None

    @property
    def quantities(self) -> tuple[str, ...]:
        """States that are not exits, `all_live`, the totals that both runs define alike, the contribution."""
        return (*self.weights, *((CONTRIBUTION,) if self.has_money else ()))

    @cached_property
    def fits(self) -> Mapping[tuple[bool, bool], Fit]:
        """(rates, model taken from the later side) -> fit; made once where the sides are alike."""
        recount = self.old.tally is not self.new.tally
        remodel = self.old.study.model != self.new.study.model or self.old.by != self.new.by
        made = {
            (r, m): (self.new if m else self.old).fit((self.new if r else self.old).tally)
            for r in {False, recount}
            for m in {False, remodel}
        }
        return {(r, m): made[r and recount, m and remodel] for r in (False, True) for m in (False, True)}

    def schedule(self, rates: bool, segments: bool, model: bool) -> tuple[Schedule, Schedule | None]:
        """The schedule of a choice, and the one whose laws say who is where, if another."""
        return _mixed(self.fits[rates, model], self.fits[segments, model], self.column)

    @cached_property
    def active(self) -> tuple[str, ...]:
        """The groups that differ; the others have no part whatever the rest."""
        differs = {
            OPENING: self.gap > 0 or not np.array_equal(self.old.tally.mix(), self.new.tally.mix()),
            SEGMENTS: self.gap > 0 and self.separates_segments,
            JOINERS: any(
                not np.array_equal(self._after(self.old)[0][k], self._after(self.new)[0][k]) for k in KINDS
            ),
            RATES: self.gap > 0,
            MODEL: self.old.study.model != self.new.study.model,
            VALUE: not np.array_equal(self.money(frozenset()), self.money(frozenset({VALUE}))),
            ADJUSTED: bool(self.old.added.any() or self.new.added.any()),
        }
        return tuple(group for group in GROUPS if differs[group])

    @cached_property
    def separates_segments(self) -> bool:
        """Whether the segments' weights can be told apart from their rates in every model involved."""
        names = {self.old.study.model.name, self.new.study.model.name}
        return self.column is not None and names <= {"plain", "recent", "segment"}

    def course(self, choice: frozenset[str]) -> Course:
        """The matrices after b under a choice."""
        schedule, laws = self.schedule(RATES in choice, SEGMENTS in choice, MODEL in choice)
        return Course.of(schedule, self.new.base, self.steps, start_of=laws)

    def opening(self, choice: frozenset[str], course: Course) -> list[Array]:
        """Who stands where at b, over the expanded states of `course`."""
        if OPENING in choice:
            return course.expand(self.new.tally.mix().to_numpy(dtype=float))
        schedule, laws = self.schedule(False, False, MODEL in choice)
        early = Course.of(schedule, self.old.base, self.gap, start_of=laws)
        added = self.old.added[: self.gap] * (ADJUSTED not in choice)
        start = early.expand(self.old.tally.mix().to_numpy(dtype=float))
        end = way(early, start, self.old.coming()[: self.gap], added, np.zeros((self.size,) * 2)).end
        return end if early.like(course) else course.expand(early.collapse(end))

    def inflow(self, choice: frozenset[str]) -> tuple[Array, Array]:
        """(n, K) joiners and returners, and adjustments, after b."""
        coming = self._after(self.new if JOINERS in choice else self.old)[0]
        added = self._after(self.new if ADJUSTED in choice else self.old)[1]
        return np.asarray(sum(coming.values())), added

    def money(self, choice: frozenset[str]) -> Array:
        found = self.new.money if VALUE in choice else self.old.money
        return found if self.has_money and found is not None else np.zeros((self.size,) * 2)

    def outcome(self, choice: frozenset[str]) -> Array:
        """(n+1, Q) figures of the periods b .. b+n; the contribution of b itself is not forecast: 0."""
        course = self.course(choice)
        found = way(course, self.opening(choice, course), *self.inflow(choice), self.money(choice))
        return self._figures(found.counts, found.paid)

    def items(self, group: str, choice: frozenset[str]) -> dict[Item, Array]:
        """The parts (n+1, Q) of what taking `group` too does, under a choice without it; {} when it is one."""
        after = choice | {group}
        course = self.course(after)
        if group == RATES:
            return self._by_move(choice, course)
        if group == JOINERS:
            old, new = self._after(self.old)[0], self._after(self.new)[0]
            return {
                (kind, "", ""): self._respond(course, after, None, new[kind] - old[kind]) for kind in KINDS
            }
        if group == OPENING:
            before = self.opening(choice, self.course(choice))
            moved = [b - a for a, b in zip(before, self.opening(after, course), strict=True)]
            return {
                ("", name, ""): self._respond(course, after, [d * (r == k) for d, r in zip(moved, course.report,
                                                                                        strict=True)])
                for k, name in enumerate(self.new.tally.states.names)
                if name in self.new.tally.states.remaining
            }  # fmt: skip
        return {}

    # ---- inner ----
    def _after(self, hand: Hand) -> tuple[dict[str, Array], Array]:
        """A side's joiners and adjustments of the periods b+1 .. b+n."""
        own = slice(self.new.base - hand.base, self.new.base - hand.base + self.steps)
        return {kind: table[own] for kind, table in hand.joiners.items()}, hand.added[own]

    def _respond(
        self, course: Course, choice: frozenset[str], opening: list[Array] | None, coming: Array | None = None
    ) -> Array:
        """What a difference in the opening or in the joiners leads to by itself."""
        none = np.zeros((self.steps, self.size))
        start = opening or [np.zeros(len(r)) for r in course.report]
        found = way(course, start, none if coming is None else coming, none, self.money(choice))
        return self._figures(found.counts, found.paid)

    def _by_move(self, choice: frozenset[str], new: Course) -> dict[Item, Array]:
        old = self.course(choice)
        if not old.like(new):
            return {}
        coming, added = self.inflow(choice)
        counts, paid = move_effects(old, new, self.opening(choice, old), coming, added, self.money(choice))
        figures, names = self._figures(counts, paid), self.new.tally.states.names
        return {
            ("", names[i], names[j]): figures[i, j]
            for i, j in zip(*np.nonzero(self.new.tally.states.allowed), strict=True)
            if names[i] in self.new.tally.states.remaining
        }

    def _figures(self, counts: Array, paid: Array) -> Array:
        out = quantities_of(counts, self.weights)
        if not self.has_money:
            return out
        none = np.zeros((*paid.shape[:-1], 1))
        return np.concatenate([out, np.concatenate([none, paid], axis=-1)[..., None]], axis=-1)


def _column(earlier: OpenRun, later: OpenRun) -> str | None:
    """The segment column that both runs know: what they were made for, else the first of the study."""
    known = [
        [name for name, role in run.tally.meta.segment_columns if role == "segment"]
        for run in (earlier, later)
    ]
    wished = [name for name in (later.by, earlier.by, *known[1]) if name in known[0] and name in known[1]]
    return wished[0] if wished else None


def _mixed(rates: Fit, weights: Fit, column: str | None) -> tuple[Schedule, Schedule | None]:
    """The schedule with the rates of one fit and the segments' weights of another.

    Pooled rates are means of the segments' rates, weighted by who was at risk. In the segment model the weights
    are the laws of who is in which segment.
    """
    if rates is weights or column is None:
        return rates.schedule, None
    if rates.model == "segment":
        return rates.schedule, weights.schedule
    if rates.model not in ("plain", "recent") or not rates.schedule.is_plain:
        return rates.schedule, None
    by_segment, weighed = segment_counts(rates, column), segment_counts(weights, column)
    share = weighed.sum(axis=2)
    total = share.sum(axis=0)
    at_risk = by_segment.sum(axis=2)
    own = np.divide(by_segment, at_risk[..., None], out=np.broadcast_to(rates.P, by_segment.shape).copy(),
                    where=at_risk[..., None] > 0)  # fmt: skip
    mixed = np.einsum("gi,gij->ij", np.divide(share, total, out=np.zeros_like(share), where=total > 0), own)
    P = np.where((total > 0)[:, None], mixed, rates.P)
    component = replace(rates.schedule.components[0], matrices=P[None])
    return replace(rates.schedule, components=(component,)), None


def segment_counts(fitted: Fit, column: str) -> Array:
    """(G, K, K) moves of each segment, weighted as the fit weighs them, in the order of the segments' values."""
    tally = fitted.tally
    where = [name for name, _ in tally.meta.segment_columns].index(column)
    values = tally.segment_values(column)
    code = np.array([values.index(v[where]) for v in tally.meta.segments], dtype=np.int64)
    moves = tally.one_step[fitted.window.keeps(tally.one_step["period"])]
    n = moves["weight"] / tally.meta.weight_scale if tally.meta.weighted else moves["n"]
    out = np.zeros((len(values), len(tally.states), len(tally.states)))
    cells = (code[moves["segment"]], moves["state"].to_numpy(), moves["next_state"].to_numpy())
    np.add.at(out, cells, n.to_numpy(dtype=float) * fitted.window.weight(moves["period"].to_numpy()))
    return out
