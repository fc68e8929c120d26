"""The study file: read, checked against its schema, frozen into a Study.

parts.py      the tables as records  whole.py      the Study they make together
source.py     typed keys, and refusals that name file, line, table and key
reading.py    the whole file       rules.py      `when` of the states, contradictions
extract.py    [input], [events]    forecast.py   [totals] [model] [joiners] [value] [budget] [people]
plans.py      scenarios, overlays  side_files.py calendar, planned joiners, budget
overrides.py  --set                data_file.py  a study made from a bare data file
"""

from cohortflow.study.data_file import default_study
from cohortflow.study.overrides import apply_overrides
from cohortflow.study.parts import (
    Adjustment,
    BudgetRow,
    ChangeSpec,
    Condition,
    EventSpec,
    InputSpec,
    JoinerSpec,
    ModelSpec,
    MoveValue,
    People,
    PlannedJoiners,
    ScenarioSpec,
    StateRule,
    ValueSpec,
)
from cohortflow.study.reading import read_study
from cohortflow.study.whole import Study

__all__ = [
    "Adjustment",
    "BudgetRow",
    "ChangeSpec",
    "Condition",
    "EventSpec",
    "InputSpec",
    "JoinerSpec",
    "ModelSpec",
    "MoveValue",
    "People",
    "PlannedJoiners",
    "ScenarioSpec",
    "StateRule",
    "Study",
    "ValueSpec",
    "apply_overrides",
    "default_study",
    "read_study",
]
