"""Measurement plans: coefficients, rotations and shots."""

from fragkit.planning._certificate import OptimalityGap as OptimalityGap
from fragkit.planning._certificate import optimality_gap as optimality_gap
from fragkit.planning._cost import plan_cost as plan_cost
from fragkit.planning._exact import Weighting as Weighting
from fragkit.planning._exact import exact_coefficients as exact_coefficients
from fragkit.planning._plan import CHEMICAL_ACCURACY as CHEMICAL_ACCURACY
from fragkit.planning._plan import Plan as Plan
from fragkit.planning._plan import PlanBound as PlanBound
from fragkit.planning._reweighted import reweighted as reweighted
from fragkit.planning._trade_off import TradeOff as TradeOff
from fragkit.planning._trade_off import trade_off as trade_off
from fragkit.planning._verb import plan as plan
