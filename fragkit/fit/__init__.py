"""From a Hamiltonian to fragments: the verb `fragment` and its strategies."""

from fragkit.fit._controls import Controls as Controls
from fragkit.fit._fit import Fit as Fit
from fragkit.fit._fit import Strategy as Strategy
from fragkit.fit._greedy import Greedy as Greedy
from fragkit.fit._joint import Joint as Joint
from fragkit.fit._low_rank import LowRank as LowRank
from fragkit.fit._residual import ResidualTarget as ResidualTarget
from fragkit.fit._residual import gauss_newton_product as gauss_newton_product
from fragkit.fit._residual import padded_count as padded_count
from fragkit.fit._residual import residual_and_gradient as residual_and_gradient
from fragkit.fit._residual import residual_matrix as residual_matrix
from fragkit.fit._residual import residual_target as residual_target
from fragkit.fit._residual import squared_residual as squared_residual
from fragkit.fit._residual import target_of as target_of
from fragkit.fit._verb import fragment as fragment
