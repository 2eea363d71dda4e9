"""From a Hamiltonian to fragments: the verb `fragment` and its strategies."""

from fragkit.fit._controls import Controls as Controls
from fragkit.fit._fit import Fit as Fit
from fragkit.fit._fit import Strategy as Strategy
from fragkit.fit._greedy import Greedy as Greedy
from fragkit.fit._joint import Joint as Joint
from fragkit.fit._low_rank import LowRank as LowRank
from fragkit.fit._verb import fragment as fragment
