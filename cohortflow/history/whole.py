"""What a part of an extract cannot know: facts of the whole that the labelling of every customer depends on."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass


@dataclass(frozen=True)
class Whole:
    """Facts of a whole extract, or of a part of it before they are put together.

    rows, missing : rows read, and those without an id;  clocked : any instant carries a time of day
    instants : first and last instant of good rows (events);  periods : ordinals with good rows (history)
    """

    rows: int
    missing: int
    clocked: bool = False
    instants: tuple[int | None, int | None] = (None, None)
    periods: tuple[int, ...] = ()

    @classmethod
    def of_parts(cls, parts: Iterable[Whole]) -> Whole:
        """The whole of several parts.

        >>> Whole.of_parts([Whole(5, 1, instants=(3, 9)), Whole(2, 0, True, (1, 4), (7,))])
        Whole(rows=7, missing=1, clocked=True, instants=(1, 9), periods=(7,))
        """
        known = list(parts)
        firsts = [p.instants[0] for p in known if p.instants[0] is not None]
        lasts = [p.instants[1] for p in known if p.instants[1] is not None]
        return cls(
            rows=sum(p.rows for p in known),
            missing=sum(p.missing for p in known),
            clocked=any(p.clocked for p in known),
            instants=(min(firsts, default=None), max(lasts, default=None)),
            periods=tuple(sorted({period for p in known for period in p.periods})),
        )
