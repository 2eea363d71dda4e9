"""Observables from the shots of an energy plan: right, with right errors, or refused with what is missing."""

import numpy as np
import pytest
from molecules import full_ci, molecule_hamiltonian
from plans import full_ci_state, low_rank_plan

from fragkit.core import Fragment, Hamiltonian, InputError, MismatchError, evaluate_features
from fragkit.estimate import (
    Observable,
    ReadoutErrors,
    estimate,
    joint_plan,
    measure,
    measure_density,
    simulate,
)
from fragkit.planning import Plan, exact_coefficients


def exact_density(name: str) -> np.ndarray:
    """Spin-summed, by pyscf from its full CI vector."""
    from pyscf import fci

    hamiltonian = molecule_hamiltonian(name)
    return fci.direct_spin1.make_rdm1(full_ci(name)[1], hamiltonian.orbitals, hamiltonian.electrons)


def dipole(name: str) -> np.ndarray:
    """Electronic dipole integrals along z in molecular orbitals, atomic units, by pyscf."""
    from molecules import mean_field

    mf = mean_field(name)
    return -mf.mo_coeff.T @ mf.mol.intor("int1e_r")[2] @ mf.mo_coeff


@pytest.mark.parametrize("shifts", [False, True])
@pytest.mark.parametrize("with_reference", [False, True])
def test_dipole_of_water_agrees_with_pyscf(shifts: bool, with_reference: bool) -> None:
    plan, state = low_rank_plan("H2O", 50_000), full_ci_state("H2O")
    integrals = dipole("H2O")
    exact = float(np.sum(integrals * exact_density("H2O")))
    counts = simulate(plan, state, shots=2000, rng=3)
    reference = state if with_reference else None
    [found] = measure(plan, counts, Observable("mu_z", 0.3, integrals), reference=reference, shifts=shifts)
    assert abs(found.value - 0.3 - exact) < 4 * found.standard_error
    # One circuit in the eigenbasis of the dipole, with all 58,000 shots, has about 0.003.
    assert found.standard_error < 0.02
    low, high = found.interval
    assert low < found.value < high


def test_energy_as_an_observable_is_no_worse_than_the_estimate() -> None:
    plan, state, hamiltonian = low_rank_plan("H6", 20_000), full_ci_state("H6"), molecule_hamiltonian("H6")
    counts = simulate(plan, state, rng=3)
    [found] = measure(plan, counts, hamiltonian, reference=state)
    usual = estimate(plan, counts)
    assert abs(found.value - full_ci("H6")[0]) < 4 * found.standard_error
    assert found.standard_error < 0.8 * usual.standard_error


def test_density_matrix_with_error_bars() -> None:
    plan, state = low_rank_plan("H4", 50_000), full_ci_state("H4")
    counts = simulate(plan, state, shots=3000, rng=6)
    density, errors = measure_density(plan, counts)
    pulls = (density - exact_density("H4"))[np.triu_indices(4)] / errors[np.triu_indices(4)]
    assert np.max(np.abs(pulls)) < 4
    assert 0.4 < np.sqrt(np.mean(pulls**2)) < 1.6
    assert np.allclose(density, density.T)
    one_body = molecule_hamiltonian("H4").one_body
    [found] = measure(plan, counts, Observable("h", 0.0, one_body))
    assert found.value == pytest.approx(float(np.sum(one_body * density)), abs=1e-6)


def test_cross_fitted_values_are_unbiased() -> None:
    """250 experiments of 40 shots per circuit: coefficients from so few data would be biased on the same data."""
    plan, state, hamiltonian = low_rank_plan("H2", 1000), full_ci_state("H2"), molecule_hamiltonian("H2")
    rng = np.random.default_rng(8)
    values = [measure(plan, simulate(plan, state, shots=40, rng=rng), hamiltonian)[0].value for _ in range(250)]
    assert abs(np.mean(values) - full_ci("H2")[0]) < 3 * np.std(values) / np.sqrt(250)


def random_plan(name: str, circuits: int) -> Plan:
    """Circuits with random orbitals, enough of them to span every two-body operator modulo the electron numbers."""
    hamiltonian, state = molecule_hamiltonian(name), full_ci_state(name, noise=0.01)
    rng = np.random.default_rng(12)
    rotations = np.linalg.qr(rng.normal(size=(circuits, hamiltonian.orbitals, hamiltonian.orbitals)))[0]
    found = exact_coefficients(hamiltonian, rotations, [state.moments(u)[1] for u in rotations])
    assert found.converged, found.message
    return Plan(
        tuple(Fragment.from_coefficients(u, c) for u, c in zip(rotations, found.coefficients, strict=True)),
        found.constant,
        np.maximum(20, np.round(50_000 * found.shares)),
        found.deviations,
        hamiltonian.electrons,
        hamiltonian.digest,
        found.residual_norm,
        found.energy_bound,
        sector_exact=True,
    )


def test_energy_derivative_is_measured_like_an_energy() -> None:
    """Hellmann-Feynman for a change of integrals: here a random Hermitian one, against the full CI density matrices."""
    from pyscf import fci

    rng = np.random.default_rng(2)
    one = rng.normal(size=(4, 4))
    two = rng.normal(size=(4, 4, 4, 4)) * 0.1
    for axes in ((1, 0, 2, 3), (0, 1, 3, 2), (2, 3, 0, 1)):
        two = two + two.transpose(axes)
    change = Hamiltonian(0.7, one + one.T, two, electrons=(2, 2))
    densities = fci.direct_spin1.make_rdm12(full_ci("H4")[1], 4, (2, 2))
    exact = 0.7 + np.sum(change.one_body * densities[0]) + 0.5 * np.sum(change.two_body * densities[1])
    plan, state = random_plan("H4", 10), full_ci_state("H4")
    counts = simulate(plan, state, shots=4000, rng=6)
    [found] = measure(plan, counts, change)
    assert abs(found.value - exact) < 4 * found.standard_error


def test_readout_correction_works_for_observables() -> None:
    plan, state = low_rank_plan("H4", 50_000), full_ci_state("H4")
    counts = simulate(plan, state, shots=5000, flips=(0.03, 0.05), rng=6)
    one_body = molecule_hamiltonian("H4").one_body
    exact = float(np.sum(one_body * exact_density("H4")))
    observable = Observable("h", 0.0, one_body)
    [raw] = measure(plan, counts, observable, least_kept=0.1)
    [corrected] = measure(plan, counts, observable, readout=ReadoutErrors.known(0.03, 0.05, orbitals=4))
    assert abs(raw.value - exact) > 5 * raw.standard_error
    assert abs(corrected.value - exact) < 4 * corrected.standard_error


def one_circuit(name: str) -> Plan:
    whole = low_rank_plan(name)
    return Plan(
        whole.fragments[:1], 0.0, [1000], [1.0], whole.electrons, "made up", residual_norm=0.0, energy_bound=0.0
    )


def test_outside_the_span_says_what_is_missing() -> None:
    plan, state = one_circuit("H4"), full_ci_state("H4")
    counts = simulate(plan, state, rng=1)
    u = plan.fragments[0].rotation
    seen = Observable("seen", 0.0, (u * [1.0, 2.0, 3.0, 4.0]) @ u.T)
    [found] = measure(plan, counts, seen, reference=state)
    assert found.standard_error < 0.2
    with pytest.raises(InputError, match=r"'h' must be in the span .* one-body, largest at orbitals"):
        measure(plan, counts, Observable("h", 0.0, molecule_hamiltonian("H4").one_body), reference=state)
    with pytest.raises(InputError, match="opposite-spin"):
        measure(plan, counts, molecule_hamiltonian("H4"), reference=state)


def test_spin_squared_is_refused_because_no_real_rotation_shows_it() -> None:
    """S² by itself: its matrix is outside the span of the features of 40 random bases, found by exact matrices."""
    plan = low_rank_plan("H2", 1000)
    with pytest.raises(InputError, match="currents"):
        measure(plan, simulate(plan, full_ci_state("H2"), rng=1), Observable.spin_squared(2, (1, 1)))
    # In the space of one alpha and one beta electron in two orbitals: states (i, j), S² = 1 − exchange on S_z = 0.
    exchange = np.zeros((4, 4))
    for i in range(2):
        for j in range(2):
            exchange[2 * i + j, 2 * j + i] = 1.0
    spin_squared = np.eye(4) - exchange
    bits = np.array([[i == 0, i == 1, j == 0, j == 1] for i in range(2) for j in range(2)], dtype=np.uint8)
    features = evaluate_features(bits)
    columns = []
    for angle in np.linspace(0.0, np.pi, 40):
        u = np.array([[np.cos(angle), -np.sin(angle)], [np.sin(angle), np.cos(angle)]])
        both = np.kron(u, u)
        columns += [(both @ np.diag(f) @ both.T).ravel() for f in features.T]
    left = np.linalg.lstsq(np.array(columns).T, spin_squared.ravel(), rcond=None)
    residual = np.array(columns).T @ left[0] - spin_squared.ravel()
    assert np.linalg.norm(residual) > 0.5


def test_single_orbital_spin_squared_has_no_such_part() -> None:
    """One orbital, one electron of each spin: S² = 0."""
    observable = Observable.spin_squared(1, (1, 1))
    assert observable.opposite_spin is not None
    assert observable.constant + observable.opposite_spin[0, 0, 0, 0] == 0.0


def test_wrong_observables_are_refused() -> None:
    plan = low_rank_plan("H2", 1000)
    counts = simulate(plan, full_ci_state("H2"), rng=1)
    with pytest.raises(InputError, match="symmetric"):
        Observable("x", 0.0, np.array([[0.0, 1.0], [0.0, 0.0]]))
    with pytest.raises(MismatchError, match="2 orbitals"):
        measure(plan, counts, Observable("x", 0.0, np.eye(3)))
    with pytest.raises(InputError, match="must be an Observable"):
        measure(plan, counts, ["dipole"])  # type: ignore[list-item]
    few = simulate(plan, full_ci_state("H2"), shots=4, rng=1)
    with pytest.raises(InputError, match="pass `reference`"):
        measure(plan, few, Observable("x", 0.0, np.eye(2)))


def test_joint_plan_beats_the_energy_plan_for_the_dipole_and_predicts_its_errors() -> None:
    plan, state, hamiltonian = low_rank_plan("H2O", 20_000), full_ci_state("H2O"), molecule_hamiltonian("H2O")
    mu = Observable("mu_z", 0.0, dipole("H2O"))
    joint = joint_plan(plan, hamiltonian, state, [(mu, 100.0)], total_shots=20_000)
    alone = joint_plan(plan, hamiltonian, state, [(mu, 1e-6)], total_shots=20_000)
    assert joint.converged, joint.message
    assert joint.plan.total_shots == 20_000
    assert joint.predicted_errors["mu_z"] < alone.predicted_errors["mu_z"]
    assert joint.predicted_errors["energy"] > alone.predicted_errors["energy"]
    counts = simulate(joint.plan, state, rng=4)
    result = estimate(joint.plan, counts)
    assert result.standard_error == pytest.approx(joint.predicted_errors["energy"], rel=0.1)
    assert abs(result.energy - full_ci("H2O")[0]) < 4 * result.standard_error
    [found] = measure(joint.plan, counts, mu, reference=state)
    assert found.standard_error == pytest.approx(joint.predicted_errors["mu_z"], rel=0.15)
    with pytest.raises(InputError, match="different names"):
        joint_plan(plan, hamiltonian, state, [(mu, 1.0), (mu, 1.0)], total_shots=20_000)
    with pytest.raises(InputError, match="total_shots"):
        joint_plan(plan, hamiltonian, state, [(mu, 1.0)], total_shots=20)
