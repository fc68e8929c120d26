"""What those who sign a forecast look at: subtotals, definitions, manual adjustments."""

from __future__ import annotations

from collections.abc import Mapping

import pandas as pd

from cohortflow.projector.subtotals import subtotals
from cohortflow.report.definitions import adjustments_frame, definitions_frame
from cohortflow.study import Study


def sign_off_tables(study: Study, tables: Mapping[str, pd.DataFrame]) -> dict[str, pd.DataFrame]:
    """`rollforward_subtotals`, `definitions`, `adjustments` of a forecast; what would be empty is absent."""
    found = {
        "rollforward_subtotals": subtotals(tables["rollforward"], study.calendar),
        "definitions": definitions_frame(study, tables),
        "adjustments": adjustments_frame(study),
    }
    return {name: frame for name, frame in found.items() if len(frame)}
