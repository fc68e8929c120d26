"""The rules of a study as operations on arrays of customers.

`Memory` holds, for a block of B customers, what the conditions may ask at the end of a period: the latest event of
each `among` set, the last period of each silent set, running counts and sums, the latest valid-until period, and
when the stay began. It is carried forward period by period; nothing looks ahead.
"""

from __future__ import annotations

import numpy as np

from cohortflow.history.cells import NO_DATE, WORD, CellPlan, Columns, flags
from cohortflow.history.columns import AMOUNT_SCALE
from cohortflow.study import Condition, Study

NOT_SEEN = np.int32(-(2**30))  # a period long before any other


class Rules:
    """The rules of a study, compiled once for all blocks."""

    def __init__(self, study: Study, plan: CellPlan) -> None:
        self.study, self.plan = study, plan
        self.place = {name: i for i, name in enumerate(study.event_order)}
        conditions = [c for rule in study.rules for c in rule.conditions]
        self.conditions: tuple[Condition, ...] = tuple(dict.fromkeys(conditions))
        self.silent = tuple(dict.fromkeys(self._set(c) for c in conditions if c.kind == "silent_for"))
        self.listed = {c: self._flags(c.events) for c in self.conditions if c.kind == "last_event"}
        self.spends = any(c.kind == "spent_at_least" for c in conditions)

    def _set(self, condition: Condition) -> frozenset[int]:
        return frozenset(self.place[n] for n in condition.events)

    def _among(self, condition: Condition) -> int:
        return self.plan.among.index(frozenset(self.place[n] for n in condition.among))

    def _flags(self, names: tuple[str, ...]) -> np.ndarray:
        """(events + 1,) bool by event; the last place stands for "no event yet"."""
        return flags((self.place[n] for n in names), self.plan.events + 1)

    def states(self, t: int, memory: Memory) -> np.ndarray:
        """(B,) position of the first rule that holds at the end of period t."""
        out = np.full(memory.size, -1, dtype=np.int8)
        open_ = np.ones(memory.size, dtype=bool)
        known: dict[Condition, np.ndarray] = {}
        for number, rule in enumerate(self.study.rules):
            holds = self._alternatives(rule.when, t, memory, known)
            take = open_ if holds is None else open_ & holds
            np.copyto(out, np.int8(number), where=take)
            open_ = open_ & ~take
        return out

    def _alternatives(
        self,
        when: tuple[tuple[Condition, ...], ...],
        t: int,
        memory: Memory,
        known: dict[Condition, np.ndarray],
    ) -> np.ndarray | None:
        """Whether any alternative holds; None = everybody."""
        if not when:
            return None
        out = None
        for alternative in when:
            every = None
            for condition in alternative:
                if condition not in known:
                    known[condition] = self.holds(condition, t, memory)
                every = known[condition] if every is None else every & known[condition]
            out = every if out is None else out | every
        return out

    def holds(self, condition: Condition, t: int, memory: Memory) -> np.ndarray:
        """(B,) whether one condition holds at the end of period t; the words are those of the contract."""
        k, kind = condition.k, condition.kind
        if kind == "last_event":
            return self.listed[condition][memory.latest[self._among(condition)]]
        if kind == "silent_for":
            last = memory.last_seen[self.silent.index(self._set(condition))]
            return (last <= t - k) & ((last > NOT_SEEN) | (memory.began <= t - k))
        if kind in ("at_least", "at_most"):
            rows = memory.counted[self.plan.counted.index(self._set(condition))].window(t, k)
            if kind == "at_least":
                return rows >= condition.n
            return (rows <= condition.n) & (memory.began <= t - k)
        if kind == "spent_at_least":
            return memory.spent.window(t, k) >= round(condition.amount * AMOUNT_SCALE)
        if kind == "tenure_below":
            return memory.known & (t - memory.began < k)
        if kind == "expired_for":
            return (memory.until > NOT_SEEN) & (memory.until <= t - k)
        return (memory.until >= t + 1) & (memory.until <= t + k)  # due_within


class Running:
    """Running totals by period, so that a window is one subtraction."""

    def __init__(self, periods: int, size: int) -> None:
        self.totals = np.zeros((periods + 1, size), dtype=np.int64)

    def add(self, t: int, values: np.ndarray) -> None:
        """Enter period t (periods are entered in order)."""
        np.add(self.totals[t], values, out=self.totals[t + 1])

    def window(self, t: int, k: int) -> np.ndarray:
        """(B,) sum over the periods t-k+1 .. t."""
        return self.totals[t + 1] - self.totals[max(t + 1 - k, 0)]


class Memory:
    """What is remembered of a block of customers; see the module text."""

    def __init__(self, rules: Rules, periods: int, size: int) -> None:
        self.rules, self.size = rules, size
        plan = rules.plan
        self.nothing = plan.events  # the place that stands for "no event yet"
        self.latest = [np.full(size, self.nothing, dtype=np.int16) for _ in plan.among]
        self.last_seen = [np.full(size, NOT_SEEN, dtype=np.int32) for _ in rules.silent]
        self.counted = [Running(periods, size) for _ in plan.counted]
        self.spent = Running(periods if rules.spends else 0, size)
        self.until = np.full(size, NO_DATE, dtype=np.int64)
        self.began = np.full(size, 2**30, dtype=np.int32)
        self.known = np.zeros(size, dtype=bool)
        self._words = [[word(s, w) for w in range(plan.words)] for s in rules.silent]

    def begin(self, t: int, who: np.ndarray, known: np.ndarray) -> None:
        """A stay begins in period t: the memory of latest events is cleared, the windows are not."""
        self.began[who] = t
        self.known = np.where(who, known, self.known)
        for latest in self.latest:
            latest[who] = self.nothing

    def take_in(self, t: int, row: Columns) -> None:
        """The used rows of period t."""
        plan = self.rules.plan
        for i, latest in enumerate(self.latest):
            event = row[f"last_{i}"]
            np.copyto(latest, event, where=event >= 0)
        for last, words in zip(self.last_seen, self._words, strict=True):
            hit = np.zeros(self.size, dtype=bool)
            for w, word in enumerate(words):
                if word:
                    hit |= (row[f"seen_{w}"] & word) != 0
            last[hit] = t
        for j, running in enumerate(self.counted):
            running.add(t, row[f"count_{j}"])
        if self.rules.spends:
            self.spent.add(t, row["amount"])
        if plan.until:
            np.maximum(self.until, row["until"], out=self.until)


def word(events: frozenset[int], w: int) -> np.int64:
    """The w-th word of bits of a set of events."""
    return np.int64(sum(1 << (e - w * WORD) for e in events if w * WORD <= e < (w + 1) * WORD))
