"""Chain or Schedule -> futures: the mix period by period, where it settles, how long customers stay."""

from cohortflow.projector.accept import as_schedule as as_schedule
from cohortflow.projector.mix import cohort_shares as cohort_shares
from cohortflow.projector.mix import step_counts as step_counts
