"""Mathematics of finite Markov chains on plain numpy arrays: no customers, no files, no labels.

Time index: row = from, column = to; p_ij is the probability of being in j at step t+1 when in i at step
t. A law (mix) is a row vector and moves by multiplication from the left: x_{t+1} = x_t P. Steps are
periods.

P            transition matrix (K, K), rows sum to 1.  Q: its block among some states, rows may sum to less
start, law   probabilities of the K states, sum 1; many functions take the index of one state instead
class        states that all reach each other.  closed: nobody leaves it.  absorbing: a closed class of one
transient    a state outside every closed class.  period: common divisor of a class's round trips
stationary   a law pi with pi P = pi.  limit: lim P^n.  time average: lim of the mean of P^0 .. P^(n-1)
deviation    D = (I - P)^#, summed differences of P^t from its time average A.  fundamental matrix Z: D + A
Kemeny constant   tr Z.  second eigenvalue: factor by which the distance to the long run shrinks, in the end
total variation   1/2 sum |x_i - y_i|: the largest difference in probability that two laws can show
first passage     first arrival in a state, at step 1 or later.  return: first passage to the state itself
exit         a state declared to be the end; inside: all others.  N = (I - Q)^{-1}: expected periods inside
retention    share still inside after n periods.  remaining mix u: the mix of those still inside, in the end
quasi-stationary  another word for the remaining mix; lambda is the share of those remaining kept a period
generator G  rates a unit of time, rows sum to 0; P(t) = exp(G t).  embeddable: P is exp(G) for some generator
repair       the nearest generator to a logarithm that is none.  root: the matrix of the n-th part of a period
derivative   dF/dP_ij, every entry moving freely.  delta method: Var F = g' Cov g.  at risk: a row's moves

What does not exist is refused with NotIdentified, or is inf or NaN with a code and a reason beside it;
what a call cannot use is refused with CallError.
"""

from cohortflow.markov.absorption import Absorption, Caution, absorb
from cohortflow.markov.arguments import check_start, check_stochastic, check_substochastic
from cohortflow.markov.derivative import (
    first_passage_derivative,
    fundamental_derivative,
    kemeny_derivative,
    mix_derivative,
    remaining_mix_derivative,
    retention_derivative,
    sequence_derivative,
    stationary_derivative,
)
from cohortflow.markov.embedding import Condition, Embedding, Root, embedding, principal_logarithm, root
from cohortflow.markov.exit_derivative import (
    exit_probability_derivative,
    exit_time_bias,
    exit_time_derivative,
    exit_variance_derivative,
    settled_base_derivative,
    visits_derivative,
)
from cohortflow.markov.gradient import Derivative, delta_variance, joined, multinomial_variance
from cohortflow.markov.passage import (
    first_passage_law,
    hit_before,
    mean_first_passage,
    mean_time_to,
    reach_probability,
    variance_first_passage,
)
from cohortflow.markov.quasi_stationary import Remaining, remaining, remaining_from
from cohortflow.markov.rates import (
    check_generator,
    mean_time_to_absorption,
    occupation_times,
    stationary_of_rates,
    transition_matrix,
)
from cohortflow.markov.repair import Repair, repair
from cohortflow.markov.stationary import (
    absorption_into_classes,
    cycle_limits,
    deviation_matrix,
    fundamental_matrix,
    kemeny_constant,
    limit_from_start,
    limit_matrix,
    periods_to_settle,
    second_eigenvalue_modulus,
    stationary,
    stationary_laws,
    time_average_matrix,
)
from cohortflow.markov.structure import (
    Structure,
    analyse,
    cyclic_groups,
    determined,
    leads_to,
    reachability,
    surely_reaches,
)
from cohortflow.markov.value_derivative import (
    ValueDerivative,
    discounted_value_derivative,
    horizon_value_derivative,
)

__all__ = [
    "Absorption",
    "Caution",
    "Condition",
    "Derivative",
    "Embedding",
    "Remaining",
    "Repair",
    "Root",
    "Structure",
    "ValueDerivative",
    "absorb",
    "absorption_into_classes",
    "analyse",
    "check_generator",
    "check_start",
    "check_stochastic",
    "check_substochastic",
    "cycle_limits",
    "cyclic_groups",
    "delta_variance",
    "determined",
    "deviation_matrix",
    "discounted_value_derivative",
    "embedding",
    "exit_probability_derivative",
    "exit_time_bias",
    "exit_time_derivative",
    "exit_variance_derivative",
    "first_passage_derivative",
    "first_passage_law",
    "fundamental_derivative",
    "fundamental_matrix",
    "hit_before",
    "horizon_value_derivative",
    "joined",
    "kemeny_constant",
    "kemeny_derivative",
    "leads_to",
    "limit_from_start",
    "limit_matrix",
    "mean_first_passage",
    "mean_time_to",
    "mean_time_to_absorption",
    "mix_derivative",
    "multinomial_variance",
    "occupation_times",
    "periods_to_settle",
    "principal_logarithm",
    "reach_probability",
    "reachability",
    "remaining",
    "remaining_from",
    "remaining_mix_derivative",
    "repair",
    "retention_derivative",
    "root",
    "second_eigenvalue_modulus",
    "sequence_derivative",
    "settled_base_derivative",
    "stationary",
    "stationary_derivative",
    "stationary_laws",
    "stationary_of_rates",
    "surely_reaches",
    "time_average_matrix",
    "transition_matrix",
    "variance_first_passage",
    "visits_derivative",
]
