"""May one believe it: assumptions tested, past forecasts scored, models compared."""

from cohortflow.assessment.adequacy import Adequacy as Adequacy
from cohortflow.assessment.adequacy import adequacy as adequacy
from cohortflow.assessment.backtest import Backtest as Backtest
from cohortflow.assessment.backtest import backtest as backtest
from cohortflow.assessment.choice import Choice as Choice
from cohortflow.assessment.choice import choose as choose
from cohortflow.assessment.windows import Windows as Windows
from cohortflow.assessment.windows import silence_windows as silence_windows
