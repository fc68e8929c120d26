"""What if: changes to a model, the levers that matter, the change that a target needs, the arms of an
experiment.
"""

from cohortflow.whatif.arms import Arms as Arms
from cohortflow.whatif.arms import compare_arms as compare_arms
from cohortflow.whatif.change import Change as Change
from cohortflow.whatif.change import changed as changed
from cohortflow.whatif.compare import WhatIf as WhatIf
from cohortflow.whatif.levers import Levers as Levers
from cohortflow.whatif.levers import sensitivity as sensitivity
from cohortflow.whatif.required import Required as Required
from cohortflow.whatif.required import required_change as required_change
from cohortflow.whatif.scenario import Scenario as Scenario
from cohortflow.whatif.trial_size import TrialSize as TrialSize
from cohortflow.whatif.trial_size import trial_size as trial_size
from cohortflow.whatif.what_if import what_if as what_if
