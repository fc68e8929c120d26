"""The words of the report: what codes mean, what the long run means, cautions, definitions, sources.

Everything is said for a reader who never heard of a Markov chain, and so that one who has cannot object.
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from types import MappingProxyType
from typing import Any

from cohortflow.report.rounding import count, unit
from cohortflow.report.text import label, upper_first

REASONS: Mapping[str, str] = MappingProxyType(
    {
        "id_missing": "customer id missing or a placeholder",
        "time_unreadable": "date or time not readable",
        "amount_unreadable": "amount not readable",
        "valid_until_unreadable": "paid-up-to date not readable",
        "weight_unreadable": "weight not readable",
        "end_unreadable": "end date not readable",
        "end_before_start": "end before start",
        "blank_cell": "a cell without a state",
        "outside_calendar": "outside the calendar file",
        "encoding_unreadable": "not readable as text",
        "ragged_row": "wrong number of columns",
        "unknown_event": "event named nowhere in the study",
        "unknown_state": "state named nowhere in the study",
        "ignored_event": "event that the study ignores",
        "after_as_of": "after the last day that counts",
        "after_exit": "after the customer had left",
        "before_log_start": "before the log was complete",
        "before_calendar": "before the calendar file begins",
        "incomplete_period": "in the incomplete last period",
        "impossible_move": "a move declared impossible",
        "identical": "same as another row in every column",
        "superseded": "an older version of a row",
        "overlap": "overlaps another row of the customer",
    }
)
OUTCOMES: Mapping[str, str] = MappingProxyType(
    {
        "read": "rows read",
        "used": "used",
        "rejected": "rejected",
        "duplicate": "dropped as duplicates",
        "set_aside": "set aside",
    }  # fmt: skip
)
PARTS: Mapping[str, str] = MappingProxyType(
    {
        "rates": "the uncertainty of the rates",
        "chance": "chance from customer to customer",
        "common_shocks": "shocks that hit everybody in a period",
        "joiners": "the uncertainty of joiners",
    }
)
PART_NAMES: Mapping[str, str] = MappingProxyType(
    {
        "rates": "rates not known exactly",
        "chance": "individual chance",
        "common_shocks": "luck shared by everybody",
        "joiners": "joiners not known",
    }
)
FORECASTERS: Mapping[str, str] = MappingProxyType(  # that need no chain, in the order they are printed
    {
        "last_mix": "last mix",
        "constant_churn": "constant churn",
        "last_year": "last year",
        "cohort_curve": "cohort curve",
    }
)
VERDICTS: Mapping[str, tuple[str, str]] = MappingProxyType(
    {
        "unique_limit": (
            "There is one long-run mix, whatever the start.",
            "If the rates stayed as they are for ever, the mix of states would come closer and closer to one and the "
            "same mix, no matter where customers are today: every state that is not left behind can be reached from "
            "every other, and nothing forces a fixed rhythm.",
        ),
        "depends_on_start": (
            "Where it settles depends on where customers start.",
            "There are several groups of states that nobody leaves once inside. Each customer ends up in one of them; "
            "the long-run mix therefore depends on today's mix, and the chances of ending in each group are given.",
        ),
        "no_limit": (
            "The mix never settles: it goes round in a fixed cycle.",
            "Some states can be revisited only after multiples of a fixed number of periods, so the mix keeps "
            "repeating a cycle instead of settling. What exists is the average over a cycle, and that is printed.",
        ),
        "exits_only": (
            "Without joiners everybody leaves in the end.",
            "From every state some way leads to an exit, and nobody comes back from an exit within the same stay. So "
            "without new joiners the base runs down to nothing; what can be said is how fast, in which mix, and by "
            "which exit. With a steady stream of joiners the base settles where as many leave as come.",
        ),
        "unique_cycle": (
            "There is one long-run mix for each place in the year, whatever the start.",
            "The rates repeat every year. If they stayed so for ever, the mix at each place in the year would come "
            "closer and closer to one and the same mix, no matter where customers are today.",
        ),
    }
)  # fmt: skip
EXPLAIN: Mapping[str, str] = MappingProxyType(
    {
        "interval": "An interval is the range of rates that the counts allow: if many studies were made like this "
                    "one, the stated share of their intervals would hold the true rate. It speaks of chance in the "
                    "counts, not of mistakes in the data or of a world that changes.",
        "band": "A band is the range in which the number of customers should end, at the stated level, if the world "
                "goes on as it did in the periods counted. It holds the parts that are listed beside it and no others.",
        "band_parts": "Luck shared by everybody does not shrink as the base grows, individual chance does. What is not "
                      "known about rates shrinks with a longer history.",
        "settled_base": "The settled base is the size at which, with the assumed number of joiners every period and "
                        "today's rates, as many customers leave as join. It is a direction, not a forecast.",
        "remaining_mix": "Follow today's customers only, and look at those still here after a long time: their mix of "
                         "states stops changing even while their number falls. That is the mix of those remaining; "
                         "its retention is the share of them that is still here one period later.",
        "periods_to_settle": "Periods to settle is how long it takes until the mix is within one percentage point of "
                             "where it settles. Beyond the horizon it is arithmetic, not forecast.",
        "retention": "Observed retention follows those who joined and counts who is still here at each age. The "
                     "model's curve is what the fitted rates imply. Where they part, the rates are not the same "
                     "for customers of different age or kind.",
        "exit_time": "Expected time until leaving counts whole periods from the end of a period in that state, the "
                     "period of leaving included. Half of the customers have left by the median.",
        "rollforward": "The roll-forward goes from the opening base to the closing base by cause; every column adds "
                       "up.",
    }
)  # fmt: skip
CAUTIONS = (
    "This is a projection, not a promise. It says what follows if customers go on moving between states at the rates "
    "counted in the past and if as many join as assumed. A price change, a campaign, a competitor or a change of the "
    "data breaks that.",
    "A band holds chance and the uncertainty of the rates as stated beside it. It does not hold mistakes in the "
    "extract, in the rules of the states, or changes that the past does not contain.",
    "The long run is a direction. Where it settles is arithmetic on today's rates, usually far beyond any horizon "
    "that was tested.",
    "Nothing here is accounting, tax, legal or investment advice. Figures that go into accounts, budgets or contracts "
    "are for qualified people to judge, with the accounting rules that apply.",
    "The counts saved with a run describe groups of people and sample paths of single customers without names or ids. "
    "They are pseudonymous personal data: keep them as you keep the extract, and ask your data protection adviser "
    "before passing them on.",
)
MONEY_CAUTIONS = (
    "These are contributions as the study counts them, not revenue, profit or cash, and no values for accounts; "
    "fixed costs are in it only where a scenario names them.",
    "Value goes as far as customers stay, far beyond what past forecasts can vouch for; only the discount holds it. "
    "Prefer the contribution up to the horizon for plans.",
)
DEFINITIONS: tuple[tuple[str, str, str], ...] = (
    ("Customer at the end of a period", "One customer has one state at the end of each period, given by the first rule "
     "of the study that holds. Only rows up to that moment are used.", "count of customers"),
    ("Live, away, left", "Live customers count as the base. Away customers (paused, in grace) are not live now but "
                         "have "
     "not left. An exit ends a stay; who comes back after an exit starts a new stay and is counted as returned.", ""),
    ("Rate of a move", "Share of the customers in a state at the end of a period who are in the other state at the end "
     "of the next.", "moves from i to j / customers in i who could be followed for one more period"),
    ("Churn by an exit", "Share of the opening base that left by that exit within the period. Who joined and left "
     "within one period is not in it, but on a line of its own.", "lost by the exit / opening customers"),
    ("Retention of joiners", "Share of those who joined together who have not left after so many periods.",
     "product over ages of (1 - left at that age / followed to that age)"),
    ("All live customers", "Sum of the live states.", "customers in live and entry states, without away and exits"),
    ("Opening to closing", "Opening + joined + returned - lost + moved in - moved out, and what could not be observed, "
     "gives closing, in every period.", "counts of customers"),
    ("Churn of a quarter", "Share of those who were there, live or away, as the quarter opened; who joins and leaves "
     "within the quarter is in the numerator too.",
     "all lost by the exit in the quarter / opening customers, live and away"),
    ("Contribution over the horizon", "What today's base and all who join bring up to the horizon, discounted.",
     "sum over periods p of b^(p - 1 + lag) x (customers x contribution a period + amounts on moves), "
     "b = (1 + rate)^(-1 / periods a year)"),
    ("Value of a customer", "Discounted contribution from now until leaving, expected for a customer in a state.",
     "V = r + b P V, r = contribution of a period, b = discount a period, P = rates"),
    ("Validated to", "The farthest distance up to which, at every distance, there are at least 8 past forecasts, the "
     "bands held as often as meant (within the interval that their number allows) and did better than the last mix.",
     "coverage = bands that held / past forecasts"),
    ("Parts of a band", "Variance from each named part by itself: individual chance, luck shared by everybody, rates, "
     "joiners.", "share = variance of the part / sum over the parts"),
    ("Lever, one point more", "Change of a figure for one hundredth more of a move's rate, paid for by the rest of its "
     "row.",
     "0.01 x d figure / d rate"),
    ("Settled base", "Base at which joining and leaving balance.",
     "joiners a period x expected periods spent in each state before leaving"),
    ("Mix of those remaining", "Long-run mix of the customers who have not left, without joiners.",
     "left eigenvector of the rates between states that are not exits, scaled to 1"),
    ("Expected time until leaving", "Mean number of periods until an exit, from a state.",
     "row sums of (I - Q)^-1, Q = rates between states that are not exits"),
)  # fmt: skip
SOURCES: tuple[tuple[str, str], ...] = (
    ("Rates as shares of counted moves", "Anderson, T. W. & Goodman, L. A. (1957), Annals of Mathematical Statistics "
                                         "28, "
     "89-110."),
    ("Intervals of rates", "Wilson, E. B. (1927), Journal of the American Statistical Association 22, 209-212; whole "
     "rows: Goodman, L. A. (1965), Technometrics 7, 247-254; compared by Brown, L. D., Cai, T. T. & DasGupta, A. "
     "(2001), "
     "Statistical Science 16, 101-133."),
    ("Errors that allow for repeated looks at one customer", "Liang, K.-Y. & Zeger, S. L. (1986), Biometrika 73, "
                                                             "13-22."),
    ("Absorbing chains, time to exit, limits", "Kemeny, J. G. & Snell, J. L. (1960), Finite Markov Chains."),
    ("Long-run mix without subtractions", "Grassmann, W. K., Taksar, M. I. & Heyman, D. P. (1985), Operations Research "
     "33, 1107-1116."),
    ("Mix of those remaining", "Darroch, J. N. & Seneta, E. (1965), Journal of Applied Probability 2, 88-100."),
    ("Bases with joiners", "Bartholomew, D. J. (1982), Stochastic Models for Social Processes, 3rd edition; Pollard, "
     "J. H. (1966), Biometrika 53, 397-415."),
    ("Value of a customer", "Howard, R. A. (1960), Dynamic Programming and Markov Processes; Pfeifer, P. E. & "
     "Carraway, R. L. (2000), Journal of Interactive Marketing 14(2), 43-55; spread: Sobel, M. J. (1982), Journal of "
     "Applied Probability 19, 794-802."),
    ("Tests of the assumptions", "Anderson & Goodman (1957), above; Kullback, S., Kupperman, M. & Ku, H. H. (1962), "
     "Technometrics 4, 573-608."),
    ("Scores of past forecasts", "Gneiting, T. & Raftery, A. E. (2007), Journal of the American Statistical "
     "Association 102, 359-378; comparison of models: Diebold, F. X. & Mariano, R. S. (1995), Journal of Business & "
     "Economic Statistics 13, 253-263."),
    ("Errors by customer and period together", "Cameron, A. C., Gelbach, J. B. & Miller, D. L. (2011), Journal of "
     "Business & Economic Statistics 29, 238-249."),
    ("Observed retention", "Kaplan, E. L. & Meier, P. (1958), Journal of the American Statistical Association 53, "
     "457-481."),
)  # fmt: skip
MODELS: Mapping[str, str] = MappingProxyType(
    {
        "plain": "one set of rates for every period and every customer in a state",
        "recent": "rates that weigh recent periods more",
        "seasonal": "rates for each position in the year",
        "tenure": "rates that differ with the time since joining",
        "time_in_state": "rates that differ with the time spent in the state",
        "segment": "rates for each segment, drawn towards the common ones",
        "second_order": "rates that also look at the state before",
        "mover_stayer": "a share of customers that never moves, the rest by common rates",
        "mixture": "several hidden kinds of customers, each with its own rates",
    }
)
JOINERS: Mapping[str, str] = MappingProxyType(
    {
        "none": "nobody joins",
        "constant": "as many join each period as on average in the periods counted",
        "last_year": "as many join as in the same period a year earlier",
        "smoothing": "joiners follow their own smoothed trend",
        "planned": "joiners as planned in the study's file",
    }
)
NOTES: Mapping[str, str] = MappingProxyType(
    {
        "no_data": "Nobody was ever seen leaving or staying in {state}: its rates are not known, and whatever passes "
                   "through it is left out.",
        "rows_without_data": "What can pass through {state} is not projected: no departure from it was counted.",
        "few_at_risk": "Fewer than 30 departures from {state} were counted: its rates are little more than a hint.",
        "undeclared_absorbing": "Nobody was seen moving out of {state}, though it is not declared an exit: either the "
                                "period counted is too short or its rule is wrong.",
        "no_buckets": "The source gave bare counts, so intervals cannot allow for repeated looks at one customer and "
                      "may be too narrow.",
        "one_period_only": "Departures from {state} were seen in one period only, so nothing is known about how its "
                           "rates differ between periods.",
        "never_exits": "From {state} no way leads to an exit: time until leaving is without end.",
        "may_not_exit": "From {state} some customers may never leave, so the mean time until leaving is without end.",
        "impossible_move": "A move declared impossible was seen from {state}; it was set aside.",
        "instants_without_offset": "{rows} rows have a time without an offset from UTC; they were read as local time.",
        "superseded_rows": "{rows} rows were replaced by later versions of themselves.",
        "identical_rows_kept": "{rows} rows are identical but carry no clock time, so they may be real repeats: they "
                               "were kept.",
        "log_start_assumed": "The study does not say when the log became complete; its first period was assumed.",
        "ties_decided_by_order": "{rows} times several events of a customer share one instant; the order of the "
                                 "study's "
                                 "rules decided.",
        "overlapping_spells": "{rows} times two spells of a customer cover the same period end; the one that began "
                              "last counts.",
        "segment_changes": "{customers} customers change their segment; the value on their first row is used.",
        "busy_customer": "One customer has {rows} rows, more than a thousandth of the extract: perhaps a house "
                         "account.",
        "extract_ends_early": "The extract's last rows are of {last_rows}, before the last day that counts "
                              "({as_of}): what "
                              "is missing looks like customers who left.",
        "two_states_in_a_period": "{rows} rows were replaced because their customer has another row for the same "
                                  "period; "
                                  "the last one counts.",
        "empty_rows": "For {state} some of the model's finer rates rest on no departure at all; the pooled rates "
                      "stand in "
                      "for them.",
        "place_not_seen": "No move was counted at place {place} of the season's cycle; the pooled rates stand in for "
                          "it.",
        "not_converged": "The fitting did not settle on an answer within its steps; its rates are provisional.",
        "tiny_type": "The kind of customers called {state} holds under 2% of them: it may be noise.",
        "types_not_identified": "The histories are too short to tell that many kinds of customers apart.",
        "no_tenure_bands": "No division by time since joining was supported by the counts: one set of rates for all.",
        "no_ladder": "No division by time in the state was supported by the counts: one set of rates for all.",
        "short_history": "Under 18 periods were counted: too few to tell how much periods differ from one another.",
        "seasons_thin": "Seasons rest on few moves; their rates are drawn towards the pooled ones.",
        "no_exit_no_discount": "The value of a customer in {state} has no bound: some never leave and nothing is "
                               "discounted.",
        "settled": "Where a scenario leads in the long run is not known: {state}.",
        "change_cut_short_in_draws": "In a share {state} of the draws a scenario asked for more than its row has and "
                                     "was cut short.",
        "joined_without_join_event": "{customers} customers appear without an event that marks joining; their history "
                                     "before is not known.",
    }
)  # fmt: skip


def said(code: str) -> str:
    """A code in words, or the code itself with spaces.

    >>> said("after_as_of"), said("some_new_code")
    ('after the last day that counts', 'some new code')
    """
    return REASONS.get(code) or OUTCOMES.get(code) or PARTS.get(code) or code.replace("_", " ")


def note(finding: Any) -> str:
    """A finding as a sentence: a Finding (code, rows, customers, detail), a record's code ("no_data:quiet"), or a
    sentence that is one already.

    >>> note("few_at_risk:quiet")
    'Fewer than 30 departures from quiet were counted: its rates are little more than a hint.'
    >>> note("The plan is taken as given.")
    'The plan is taken as given.'
    """
    code = str(getattr(finding, "code", finding))
    kind, _, state = code.partition(":")
    if " " in kind:
        return code
    detail = {"state": state, "place": state, **getattr(finding, "detail", {})}
    state, segment = str(detail["state"]), str(detail.get("segment", ""))
    words = NOTES.get(kind)
    if words is None:
        words = upper_first(
            f"{kind.replace('_', ' ')}{f': {label(state)}' if state else ''}{_size(finding)}."
        )
    for key in ("rows", "customers"):
        words = words.replace(f"{{{key}}}", count(getattr(finding, key, 0)))
    for key in re.findall(r"\{([a-z_]+)\}", words):
        words = words.replace(f"{{{key}}}", label(detail.get(key, "")), 1)
    return f"{label(segment)}: {words}" if segment else words


def _size(finding: Any) -> str:
    parts = [f"{count(n)} {what}" for what in ("rows", "customers") if (n := getattr(finding, what, 0))]
    return f" ({', '.join(parts)})" if parts else ""


def verdict(code: str) -> tuple[str, str]:
    """The limit theorem's verdict: in one sentence, and why.

    >>> verdict("no_limit")[0]
    'The mix never settles: it goes round in a fixed cycle.'
    """
    return VERDICTS.get(code, (upper_first(code.replace("_", " ")) + ".", ""))


def a_period(kind: str) -> str:
    """ "a month", "an own period": one period with its article."""
    word = unit(kind, 1)
    return f"{'an' if word[0] in 'aeiou' else 'a'} {word}"
