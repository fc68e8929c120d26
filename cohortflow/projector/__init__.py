"""Chain or Schedule -> futures: the mix period by period, where it settles, how long customers stay."""

from cohortflow.projector.accept import as_schedule as as_schedule
from cohortflow.projector.exits import ExitTimes as ExitTimes
from cohortflow.projector.exits import time_to_exit as time_to_exit
from cohortflow.projector.joiner_methods import joiner_forecast as joiner_forecast
from cohortflow.projector.joiners import Joiners as Joiners
from cohortflow.projector.joiners import planned_numbers as planned_numbers
from cohortflow.projector.longrun import LongRun as LongRun
from cohortflow.projector.longrun import long_run as long_run
from cohortflow.projector.mix import cohort_shares as cohort_shares
from cohortflow.projector.mix import step_counts as step_counts
from cohortflow.projector.observed import cohort_table as cohort_table
from cohortflow.projector.observed import observed_retention as observed_retention
from cohortflow.projector.project import project as project
from cohortflow.projector.projection import Projection as Projection
from cohortflow.projector.rates import rates_actual as rates_actual
from cohortflow.projector.rates import rates_forecast as rates_forecast
from cohortflow.projector.retention import Retention as Retention
from cohortflow.projector.retention import retention as retention
from cohortflow.projector.rollforward import rollforward_actual as rollforward_actual
from cohortflow.projector.value import Value as Value
from cohortflow.projector.value import value as value
