"""Rotations, coefficients and shares together: maps, gradients, exactness, and what the descent reaches."""

import numpy as np
import pytest
from molecules import full_ci, molecule_hamiltonian
from scipy.linalg import expm

from fragkit.core import Fragment, Hamiltonian, InputError, MismatchError, fragment_tensors
from fragkit.fit import LowRank, fragment
from fragkit.planning import plan
from fragkit.planning._exact.coefficients import exact_coefficients
from fragkit.planning._operators.design_map import DesignMap
from fragkit.planning._operators.factor import Factor, symmetric_product
from fragkit.planning._rotations.covariances import Covariances, cayley, tournament, variance_curvature
from fragkit.planning._rotations.lagrangian import Lagrangian
from fragkit.planning._rotations.optimise import optimise_rotations
from fragkit.planning._rotations.quasi_newton import Memory
from fragkit.planning._rotations.refresh import settle
from fragkit.planning._rotations.restore import restore
from fragkit.planning._rotations.start import random_rotations, starting_rotations
from fragkit.states import ReferenceState, reference_state


def random_hamiltonian(orbitals: int, electrons: tuple[int, int], seed: int = 0) -> Hamiltonian:
    rng = np.random.default_rng(seed)
    factors = rng.standard_normal((3, orbitals, orbitals))
    one_body = rng.standard_normal((orbitals, orbitals))
    return Hamiltonian(0.3, one_body + one_body.T, factors=factors + factors.transpose(0, 2, 1), electrons=electrons)


def random_state(hamiltonian: Hamiltonian, noise: float = 1e-2, seed: int = 1) -> ReferenceState:
    from math import comb

    shape = tuple(comb(hamiltonian.orbitals, k) for k in hamiltonian.electrons)
    vector = np.random.default_rng(seed).standard_normal(shape)
    vector[0, 0] += 5.0
    return ReferenceState.from_ci_vector(hamiltonian, vector / np.linalg.norm(vector), noise=noise)


def antisymmetric(rng: np.random.Generator, count: int, orbitals: int) -> np.ndarray:
    x = rng.standard_normal((count, orbitals, orbitals))
    return x - x.transpose(0, 2, 1)


def along(gradient: np.ndarray, generator: np.ndarray) -> float:
    """Σ_{p<q} G_pq X_pq over all rotations."""
    return 0.5 * float(np.vdot(gradient, generator))


CASES = [(4, (2, 2)), (3, (2, 1)), (5, (3, 2)), (4, (1, 1)), (3, (3, 1)), (2, (1, 1))]


@pytest.mark.parametrize(("orbitals", "electrons"), CASES)
def test_map_and_its_gradient(orbitals: int, electrons: tuple[int, int]) -> None:
    """The residual is the Hamiltonian minus the fragments; Aᵀ is its transpose; the gradient is that of differences."""
    rng = np.random.default_rng(orbitals)
    hamiltonian = random_hamiltonian(orbitals, electrons)
    design = DesignMap(hamiltonian)
    rotations = random_rotations(3, orbitals, rng)
    coefficients = rng.standard_normal((3, orbitals**2 + orbitals))
    dual = design.shifts.project(rng.standard_normal(design.space.size))
    found = design.evaluate(rotations, coefficients, lambda residual: dual)

    tensors = fragment_tensors([Fragment.from_coefficients(u, c) for u, c in zip(rotations, coefficients, strict=True)])
    rows = design.space.hamiltonian_rows(hamiltonian) - design.space.hamiltonian_rows(
        Hamiltonian(0.0, tensors.one_body, np.zeros((orbitals,) * 4), electrons=electrons)
    )
    opposite = Hamiltonian(0.0, np.zeros((orbitals,) * 2), tensors.opposite_spin, electrons=electrons)
    same = Hamiltonian(0.0, np.zeros((orbitals,) * 2), tensors.same_spin, electrons=electrons)
    rows[design.space.opposite] -= design.space.hamiltonian_rows(opposite)[design.space.opposite]
    rows[design.space.same] -= design.space.hamiltonian_rows(same)[design.space.same]
    np.testing.assert_allclose(found.residual, design.shifts.project(rows), atol=1e-10)
    np.testing.assert_allclose(found.residual, design.residual(rotations, coefficients), atol=1e-10)

    zero = design.evaluate(rotations, 0.0 * coefficients, lambda residual: dual)
    product = float(dual @ (zero.residual - found.residual))
    assert product == pytest.approx(float(np.vdot(found.adjoint, coefficients)), rel=1e-10)

    generator = antisymmetric(rng, 3, orbitals)
    step = 1e-5
    ends = [
        float(dual @ design.residual(np.stack([u @ expm(s * x) for u, x in zip(rotations, generator, strict=True)]), c))
        for s, c in ((step, coefficients), (-step, coefficients))
    ]
    assert (ends[1] - ends[0]) / (2 * step) == pytest.approx(along(found.gradient, generator), rel=1e-7, abs=1e-7)

    turned = sum(
        design.turning(u, c) @ x[np.triu_indices(orbitals, 1)]
        for u, c, x in zip(rotations, coefficients, generator, strict=True)
    )
    assert float(dual @ turned) == pytest.approx(along(found.gradient, generator), rel=1e-9, abs=1e-9)


@pytest.mark.parametrize(("orbitals", "electrons"), CASES)
def test_constant_features_are_shifts(orbitals: int, electrons: tuple[int, int]) -> None:
    """What `features` leaves out is constant on every determinant of the sector, and its operators are shifts."""
    design = DesignMap(random_hamiltonian(orbitals, electrons))
    left, singular, _ = np.linalg.svd(design.features)
    constant = left[:, len(singular) :]
    np.testing.assert_allclose(design.mixed @ constant, 0.0, atol=1e-12)
    for rotation in random_rotations(3, orbitals, np.random.default_rng(5)):
        dense = design.space.dense(design.space.pair_columns(rotation), rotation)
        np.testing.assert_allclose(design.shifts.project(dense @ constant), 0.0, atol=1e-9)


@pytest.mark.parametrize(("orbitals", "electrons", "count"), [(4, (2, 2), 9), (3, (2, 1), 6), (4, (2, 2), 5)])
def test_gradient_of_the_lagrangian(orbitals: int, electrons: tuple[int, int], count: int) -> None:
    """By differences, in the scaled variables, away from the refresh and with changed multipliers."""
    rng = np.random.default_rng(3)
    hamiltonian = random_hamiltonian(orbitals, electrons)
    design = DesignMap(hamiltonian)
    covariances = Covariances(random_state(hamiltonian), design, 1e-3)
    start = 0.1 * rng.standard_normal((count, orbitals**2 + orbitals))
    base = restore(design, covariances, random_rotations(count, orbitals, rng), start, iterations=2)
    lagrangian = Lagrangian(design, covariances, base, 1.3)
    dual = base.dual + design.shifts.project(0.1 * rng.standard_normal(design.space.size))
    first = lagrangian.evaluate(base.rotations, base.scaled, dual)
    point = lagrangian.evaluate(*lagrangian.step(first, 0.1 * rng.standard_normal(len(first.gradient))), dual)
    direction = rng.standard_normal(len(point.gradient))
    step = 1e-5
    values = [lagrangian.evaluate(*lagrangian.step(point, s * direction), dual).value for s in (step, -step)]
    slope = (values[0] - values[1]) / (2 * step)
    assert slope == pytest.approx(float(point.gradient @ direction), rel=1e-6)
    again = lagrangian.evaluate(point.rotations, point.scaled, dual, point.moments)
    np.testing.assert_allclose(again.gradient, point.gradient, rtol=0, atol=1e-12 * np.max(np.abs(point.gradient)))


def test_settled_coefficients_are_exact_and_stationary() -> None:
    """They reproduce the Hamiltonian, no exact change of them lowers the cost, and the convex step agrees."""
    hamiltonian = random_hamiltonian(4, (2, 2))
    design = DesignMap(hamiltonian)
    covariances = Covariances(random_state(hamiltonian), design, 0.0)
    rotations = random_rotations(9, 4, np.random.default_rng(2))
    found = settle(design, covariances, rotations, np.full(9, 1 / 9), iterations=60)
    assert found.infeasibility < 1e-12
    assert np.linalg.norm(design.residual(rotations, found.coefficients)) < 1e-11
    other = exact_coefficients(hamiltonian, rotations, [covariances.matrix(u) for u in rotations])
    assert found.cost == pytest.approx(other.cost, rel=1e-4)
    np.testing.assert_allclose(found.shares, other.shares, atol=0.01)


def test_restored_point() -> None:
    """An exact point stays where it is, with multipliers that leave no gradient by the coefficients."""
    hamiltonian = random_hamiltonian(4, (2, 2))
    design = DesignMap(hamiltonian)
    covariances = Covariances(random_state(hamiltonian), design, 0.0)
    rotations = random_rotations(9, 4, np.random.default_rng(2))
    settled = settle(design, covariances, rotations, np.full(9, 1 / 9), iterations=60)
    base = restore(design, covariances, rotations, settled.coefficients)
    np.testing.assert_array_equal(base.rotations, rotations)
    assert base.cost == pytest.approx(settled.cost, rel=1e-10)
    point = Lagrangian(design, covariances, base, 2.0).evaluate(rotations, base.scaled, base.dual)
    assert point.cost == pytest.approx(settled.cost, rel=1e-10)
    assert np.linalg.norm(point.multiplier_step) < 1e-9

    # A disturbed point is led back to exactness by rotations and coefficients together.
    disturbed = settled.coefficients + 1e-3 * np.random.default_rng(3).standard_normal((9, 20))
    moved = restore(design, covariances, rotations, disturbed)
    assert moved.infeasibility < 1e-11
    assert np.linalg.norm(design.residual(moved.rotations, moved.coefficients)) < 1e-9
    assert 0.0 < np.max(np.abs(moved.rotations - rotations)) < 0.1


def test_settle_refuses_too_few_circuits() -> None:
    hamiltonian = random_hamiltonian(5, (2, 2))
    design = DesignMap(hamiltonian)
    covariances = Covariances(random_state(hamiltonian), design, 0.0)
    rotations = random_rotations(6, 5, np.random.default_rng(2))
    with pytest.raises(InputError, match="`count` must be larger"):
        settle(design, covariances, rotations, np.full(6, 1 / 6), iterations=1)


def test_curvature_of_a_variance() -> None:
    """Second differences of the variance itself, one generator at a time."""
    rng = np.random.default_rng(4)
    hamiltonian = random_hamiltonian(4, (2, 2))
    covariances = Covariances(random_state(hamiltonian), DesignMap(hamiltonian), 1e-3)
    rotations = random_rotations(2, 4, rng)
    coefficients = rng.standard_normal((2, 20))
    found = variance_curvature(covariances, rotations, coefficients)
    step = 1e-3
    for k, (p, q) in enumerate(zip(*np.triu_indices(4, 1), strict=True)):
        generator = np.zeros((4, 4))
        generator[p, q], generator[q, p] = step, -step
        up, here, down = (
            covariances.evaluate(cayley(rotations, s * generator), coefficients)[0] for s in (1.0, 0.0, -1.0)
        )
        expected = np.maximum((up - 2 * here + down) / step**2, 0.0)
        # The pairs of a round are turned together, which mixes in a little of each other's derivatives.
        np.testing.assert_allclose(found[:, k], expected, rtol=0.5, atol=0.5 * np.max(found))


@pytest.mark.parametrize("players", range(1, 9))
def test_every_pair_meets_once(players: int) -> None:
    rounds = tournament(players)
    met = [(int(i), int(j)) for left, right in rounds for i, j in zip(left, right, strict=True)]
    assert sorted(met) == [(i, j) for i in range(players) for j in range(i + 1, players)]
    assert all(len({*left.tolist(), *right.tolist()}) == 2 * len(left) for left, right in rounds)


@pytest.mark.parametrize("kind", [np.float64, np.float32])
def test_factor(kind: type) -> None:
    rng = np.random.default_rng(6)
    shifts = np.linalg.qr(rng.standard_normal((8, 2)))[0]
    blocks = rng.standard_normal((8, 30))
    blocks -= shifts @ (shifts.T @ blocks)
    factor = Factor(np.asfortranarray(blocks.astype(kind)), shifts)
    rows = rng.standard_normal(8)
    rows -= shifts @ (shifts.T @ rows)
    expected = np.linalg.pinv(blocks @ blocks.T, rcond=1e-10) @ rows
    accuracy = 1e-11 if kind is np.float64 else 1e-4
    np.testing.assert_allclose(factor.solve(rows), expected, rtol=0, atol=accuracy)
    half = factor.half_solve(rows[:, None])[:, 0]
    assert float(half @ half) == pytest.approx(float(rows @ expected), rel=accuracy * 10)
    np.testing.assert_allclose(symmetric_product(factor.into_inverse(), rows), expected, rtol=0, atol=accuracy)
    assert not factor.singular
    assert Factor(np.asfortranarray(blocks[:, :4].astype(kind)), shifts).singular


def test_quasi_newton_memory_against_the_update_formula() -> None:
    """H of the Broyden-Fletcher-Goldfarb-Shanno formula, built up as a matrix (Nocedal & Wright 2006, eq. 6.17)."""
    rng = np.random.default_rng(7)
    size, variables = 4, 6
    root = rng.standard_normal((variables, variables))
    hessian = root @ root.T + np.eye(variables)
    memory = Memory(size, variables)
    pairs = []
    for _ in range(11):
        step = rng.standard_normal(variables)
        assert memory.add(step, hessian @ step)
        pairs.append((step, hessian @ step))
    assert not memory.add(step, -step)
    inverse = memory.scale * np.eye(variables)
    for s, y in pairs[-size:]:
        left = np.eye(variables) - np.outer(s, y) / (s @ y)
        inverse = left @ inverse @ left.T + np.outer(s, s) / (s @ y)
    gradient = rng.standard_normal(variables)
    np.testing.assert_allclose(memory.direction(gradient), -inverse @ gradient, rtol=1e-10)

    # A linear change of variables x' = T x: steps go with T, gradients with its inverse transpose.
    change = rng.standard_normal((variables, variables)) + 3 * np.eye(variables)
    back = np.linalg.inv(change)
    memory.scale = 0.0
    before = memory.direction(gradient)
    memory.transform(lambda rows: rows @ change.T, lambda rows: rows @ back)
    np.testing.assert_allclose(memory.direction(back.T @ gradient), change @ before, rtol=1e-8)
    memory.clear()
    assert len(memory) == 0


@pytest.mark.parametrize("count", [9, 6])
def test_design_is_exact_and_much_cheaper_than_its_start(count: int) -> None:
    """Exact in random states of the sector, above and below the count that generic rotations need."""
    hamiltonian = molecule_hamiltonian("H4")
    state = reference_state(hamiltonian, "cisd", noise=1e-3)
    found = optimise_rotations(hamiltonian, state, count, max_evaluations=400)
    assert found.infeasibility < 1e-9
    np.testing.assert_allclose(
        found.rotations @ found.rotations.transpose(0, 2, 1), np.broadcast_to(np.eye(4), (count, 4, 4)), atol=1e-10
    )
    assert found.shares.sum() == pytest.approx(1.0)
    variances = state.variance_and_gradient(found.rotations, found.coefficients)[0]
    assert np.sum(np.sqrt(variances)) ** 2 == pytest.approx(found.cost, rel=0.05)
    low_rank = fragment(hamiltonian, LowRank())
    plain = sum(
        np.sqrt(state.variance_and_gradient(f.rotation[None], f.coefficients[None])[0][0]) for f in low_rank.fragments
    )
    assert found.cost < 0.2 * plain**2

    # The convex step at these rotations is exact and no dearer, and the operators agree on any state.
    covariances = [state.moments(u)[1] + 1e-5 * np.eye(20) for u in found.rotations]
    settled = exact_coefficients(hamiltonian, found.rotations, covariances)
    assert settled.relative_residual < 1e-9
    assert settled.cost < found.cost * (1 + 1e-6)
    for seed in range(3):
        other = random_state(hamiltonian, noise=0.0, seed=seed)
        energy = settled.constant + sum(
            float(other.moments(u)[0] @ c) for u, c in zip(found.rotations, settled.coefficients, strict=True)
        )
        assert energy == pytest.approx(other.energy(hamiltonian), abs=1e-8)


def test_water_reaches_the_level_of_much_longer_runs() -> None:
    """STO-3G water, 20 circuits, planned on CISD and evaluated on the full CI state at the plan's own shares.

    0.864 Ha² is the best of low rank with one-body repartition and overlapping Pauli groups, computed with pyscf and
    OpenFermion alone; a plain numpy minimisation of the same cost reached 0.062–0.083 in a minute.
    """
    hamiltonian = molecule_hamiltonian("H2O")
    found = optimise_rotations(
        hamiltonian, reference_state(hamiltonian, "cisd", noise=1e-4), 20, ridge=3e-4, max_evaluations=600
    )
    truth = ReferenceState.from_ci_vector(hamiltonian, full_ci("H2O")[1])
    variances = truth.variance_and_gradient(found.rotations, found.coefficients)[0]
    assert np.sum(variances / found.shares) < 0.085
    assert found.infeasibility < 1e-9
    assert np.max(np.abs(found.coefficients)) < 2.0


def test_same_seed_same_design_and_several_starts() -> None:
    hamiltonian = molecule_hamiltonian("H4")
    state = reference_state(hamiltonian, "cisd", noise=1e-3)
    first, second = (optimise_rotations(hamiltonian, state, 9, rng=3, max_evaluations=120) for _ in range(2))
    np.testing.assert_array_equal(first.rotations, second.rotations)
    np.testing.assert_array_equal(first.cost_history, second.cost_history)
    several = optimise_rotations(hamiltonian, state, 9, rng=3, starts=3, max_evaluations=400)
    assert 400 <= several.evaluations <= 450
    assert not first.converged
    assert "still falling" in first.message
    settled = optimise_rotations(hamiltonian, state, 9, rng=3, tolerance=0.5)
    assert settled.converged
    assert settled.evaluations < 1000


def test_determinant_reference_without_fluctuations() -> None:
    """A Hartree-Fock state alone: singular covariances, which must neither crash nor give infinite coefficients."""
    hamiltonian = molecule_hamiltonian("H4")
    found = optimise_rotations(hamiltonian, reference_state(hamiltonian, "hf"), 9, max_evaluations=150)
    assert found.infeasibility < 1e-9
    assert np.all(np.isfinite(found.coefficients))


@pytest.mark.parametrize(("orbitals", "electrons"), [(2, (1, 1)), (3, (1, 0)), (3, (2, 3)), (4, (3, 1)), (1, (1, 1))])
def test_small_sectors(orbitals: int, electrons: tuple[int, int]) -> None:
    """One electron, one hole, full shells: many operators are constants there."""
    hamiltonian = random_hamiltonian(orbitals, electrons)
    state = reference_state(hamiltonian, "fci", noise=1e-2)
    found = optimise_rotations(hamiltonian, state, 5, max_evaluations=60)  # with 4 one start in four succeeds
    assert found.infeasibility < 1e-9
    assert np.all(np.isfinite(found.rotations))


def test_starting_rotations() -> None:
    hamiltonian = molecule_hamiltonian("H4")
    rng = np.random.default_rng(0)
    given = random_rotations(2, 4, rng)
    np.testing.assert_array_equal(starting_rotations(hamiltonian, 5, given, rng)[:2], given)
    for start in (None, "low-rank", fragment(hamiltonian, LowRank())):
        for count in (3, 30):
            rotations = starting_rotations(hamiltonian, count, start, rng)
            assert rotations.shape == (count, 4, 4)
            np.testing.assert_allclose(
                rotations @ rotations.transpose(0, 2, 1), np.broadcast_to(np.eye(4), (count, 4, 4)), atol=1e-12
            )
    # Haar's measure: each entry has mean 0 and variance 1/n.
    many = random_rotations(4000, 4, rng)
    np.testing.assert_allclose(many.mean(axis=0), 0.0, atol=0.05)
    np.testing.assert_allclose((many**2).mean(axis=0), 0.25, atol=0.03)


class Interrupting(ReferenceState):
    """Raises KeyboardInterrupt once, after some evaluations, as Ctrl-C does."""

    def __init__(self, inner: ReferenceState, calls: int) -> None:
        self.inner, self.left = inner, calls
        self.orbitals, self.electrons, self.digest = inner.orbitals, inner.electrons, inner.digest
        self.description, self.hamiltonian_digest = inner.description, inner.hamiltonian_digest

    def variance_and_gradient(self, *args, **kwargs):
        self.left -= 1
        if self.left == 0:
            raise KeyboardInterrupt
        return self.inner.variance_and_gradient(*args, **kwargs)

    def moments(self, rotation):
        return self.inner.moments(rotation)

    def sample(self, rotation, shots, rng=None):
        raise NotImplementedError

    def energy(self, hamiltonian):
        raise NotImplementedError

    def variance(self, hamiltonian):
        raise NotImplementedError

    def _expectations(self, rotations, coefficients):
        raise NotImplementedError


def test_interrupt_checkpoint_and_resume(tmp_path) -> None:
    hamiltonian = molecule_hamiltonian("H4")
    state = reference_state(hamiltonian, "cisd", noise=1e-3)
    path = tmp_path / "rotations.npz"
    with pytest.raises(KeyboardInterrupt):
        optimise_rotations(hamiltonian, Interrupting(state, 200), 9)
    stopped = optimise_rotations(
        hamiltonian, Interrupting(state, 200), 9, on_interrupt="return", checkpoint=path, progress=True
    )
    assert not stopped.converged
    assert stopped.message.startswith("Interrupted")
    assert stopped.infeasibility < 1e-9
    resumed = optimise_rotations(hamiltonian, state, 9, checkpoint=path, resume=True, max_evaluations=500)
    assert resumed.cost < stopped.cost
    assert resumed.evaluations > stopped.evaluations
    with pytest.raises(InputError, match="`checkpoint` must not exist yet"):
        optimise_rotations(hamiltonian, state, 9, checkpoint=path)
    with pytest.raises(MismatchError, match="belong to this state"):
        optimise_rotations(hamiltonian, state.with_noise(0.1), 9, checkpoint=path, resume=True)
    with pytest.raises(MismatchError, match="`count` = 8"):
        optimise_rotations(hamiltonian, state, 8, checkpoint=path, resume=True)
    path.write_bytes(b"not a zip")
    with pytest.raises(InputError, match="written by this package"):
        optimise_rotations(hamiltonian, state, 9, checkpoint=path, resume=True)


def test_surplus_circuits_are_left_out_again(tmp_path) -> None:
    """Also when the search is interrupted, or out of evaluations, while there are too many; and it resumes there."""
    hamiltonian = molecule_hamiltonian("LiH")
    state = reference_state(hamiltonian, "cisd", noise=1e-2)
    direct = optimise_rotations(hamiltonian, state, 16, tolerance=2e-2)
    better = optimise_rotations(hamiltonian, state, 16, tolerance=2e-2, surplus=0.5)
    assert len(better.rotations) == len(better.coefficients) == len(better.shares) == 16
    assert better.infeasibility < 1e-9
    assert better.cost < 1.02 * direct.cost
    short = optimise_rotations(hamiltonian, state, 16, surplus=0.5, max_evaluations=100)
    assert len(short.rotations) == 16
    assert short.infeasibility < 1e-9
    assert not short.converged
    path = tmp_path / "rotations.npz"
    stopped = optimise_rotations(
        hamiltonian, Interrupting(state, 300), 16, surplus=0.5, on_interrupt="return", checkpoint=path
    )
    assert stopped.message.startswith("Interrupted")
    assert len(stopped.rotations) == 16
    assert stopped.infeasibility < 1e-9
    resumed = optimise_rotations(hamiltonian, state, 16, surplus=0.5, tolerance=2e-2, checkpoint=path, resume=True)
    assert resumed.converged
    assert resumed.cost < 1.02 * direct.cost
    with pytest.raises(MismatchError, match="`count` = 17 or 14 or 12 rotations"):
        optimise_rotations(hamiltonian, state, 12, surplus=0.4, checkpoint=path, resume=True)


@pytest.mark.parametrize(
    ("options", "message"),
    [
        ({"count": 0}, "`count` must be at least 1"),
        ({"starts": 0}, "`starts` must be at least 1"),
        ({"tolerance": 0.0}, "`tolerance` must be"),
        ({"ridge": -1.0}, "`ridge` must be"),
        ({"surplus": -0.5}, "`surplus` must be"),
        ({"ridge": "much"}, "`ridge` must be"),
        ({"max_evaluations": 0}, "`max_evaluations` must be"),
        ({"on_interrupt": "ignore"}, "`on_interrupt` must be"),
        ({"start": "warm"}, "`start` must be"),
        ({"start": np.zeros((1, 4, 4))}, "start"),
        ({"start": np.stack([np.eye(4)] * 10)}, "at most `count`"),
        ({"resume": True}, "`checkpoint` must be given"),
        ({"checkpoint": "rotations.txt"}, "ending in .npz"),
        ({"count": 2}, "`count` must be larger"),
    ],
)
def test_refused_input(options: dict, message: str) -> None:
    hamiltonian = molecule_hamiltonian("H4")
    state = reference_state(hamiltonian, "hf", noise=1e-2)
    count = options.pop("count", 9)
    with pytest.raises(InputError, match=message):
        optimise_rotations(hamiltonian, state, count, **options)


def test_ridge_of_a_plan_bounds_its_coefficients() -> None:
    hamiltonian = molecule_hamiltonian("H4")
    state = reference_state(hamiltonian, "cisd")
    sizes, costs = [], []
    for ridge in (0.0, 1e-2):
        made = plan(hamiltonian, state, circuits=9, planning_noise=1e-5, ridge=ridge, max_evaluations=300)
        sizes.append(sum(float(np.sum(piece.coefficients**2)) for piece in made.fragments))
        costs.append(made.cost)
        assert made.residual_norm < 1e-8
    assert sizes[1] < 0.8 * sizes[0]
    assert costs[0] < costs[1]
    with pytest.raises(InputError, match="`ridge` must be"):
        plan(hamiltonian, state, ridge=-1.0)
