"""The least-variance problem as a second-order cone programme, solved by clarabel."""

from importlib import import_module
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from fragkit.planning._exact.newton import Weights
from fragkit.planning._exact.unit_design import UnitDesign

Array = NDArray[np.float64]


def cone_weights(design: UnitDesign, *, tolerance: float = 1e-8, iterations: int = 200) -> Weights:
    """min Σ_m t_m with |x_m| ≤ t_m and Σ_m B_m x_m = h, whitened coefficients x_m.

    Independent of the Newton iteration on the weights, and much slower: every entry of B is a constraint coefficient
    (H2O with 20 circuits: some seconds). Source of the formulation: Sagnol, arXiv:0912.5467.
    """
    clarabel: Any = import_module("clarabel")  # its names are not declared to type checkers

    design.reduce()  # equations that say the same twice stop the solver
    count, (rows, columns) = design.count, design.matrix.shape
    if not np.any(design.wanted) or columns == 0:
        return Weights(np.zeros(count), np.zeros(rows), 0.0, 0.0, True, 0, None)
    scale = float(np.linalg.norm(design.wanted))
    # Variables: t (K), then x. The cones want −(t_m, x_m) + s = 0 with s in the cone.
    pieces, offset = [], count
    for m, block in enumerate(design.blocks):
        size = block.stop - block.start
        picks = np.concatenate([[m], offset + np.arange(size)])
        pieces.append(
            sparse.csc_array((-np.ones(size + 1), (np.arange(size + 1), picks)), shape=(size + 1, count + columns))
        )
        offset += size
    equality = sparse.hstack([sparse.csc_array((rows, count)), sparse.csc_array(design.matrix)])
    constraints = sparse.csc_matrix(sparse.vstack([equality, *pieces]))
    right = np.concatenate([design.wanted / scale, np.zeros(count + columns)])
    cones = [clarabel.ZeroConeT(rows)]
    cones += [clarabel.SecondOrderConeT(1 + block.stop - block.start) for block in design.blocks]
    settings = clarabel.DefaultSettings()
    settings.verbose = False
    settings.max_iter = iterations
    settings.tol_gap_rel = settings.tol_gap_abs = settings.tol_feas = tolerance
    objective = np.concatenate([np.ones(count), np.zeros(columns)])
    empty = sparse.csc_matrix((count + columns, count + columns))
    solution = clarabel.DefaultSolver(empty, objective, constraints, right, cones, settings).solve()
    weights = scale * np.maximum(np.array(solution.x[:count]), 0.0)
    dual = -np.array(solution.z[:rows])
    sizes = np.array([np.sum((design.matrix[:, block].T @ dual) ** 2) for block in design.blocks])
    bound = float(design.wanted @ dual) ** 2 / float(np.max(sizes))
    # The solver's x meets the equations to its tolerance only; the weights give coefficients that meet them exactly.
    information = design.information(np.maximum(weights, 1e-9 * np.max(weights)))
    exact_dual = information.inverse(design.wanted)
    response = design.matrix.T @ exact_dual
    lengths = [np.linalg.norm(response[block]) for block in design.blocks]
    cost = float(information.weights @ np.array(lengths)) ** 2
    done = str(solution.status) == "Solved" and cost - bound <= 10.0 * max(tolerance, 1e-7) * cost
    return Weights(information.weights, exact_dual, cost, bound, done, int(solution.iterations), information)
