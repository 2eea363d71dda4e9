"""The main job on real molecules: integrals, fragments, plan, counts, energy, against full CI by pyscf."""

import numpy as np
import pytest
from molecules import FULL_CI, full_ci, molecule_hamiltonian

import fragkit
from fragkit.planning import plan_cost

# Fragments of the low-rank form with weight above 1e-8 hartree, without the one-body fragment, and their cost
# (Σ √Var)² in hartree² in the full CI state: computed once with numpy, pyscf 2.14 and OpenFermion 1.8 alone
# (None: not computed).
LOW_RANK = {
    "H2": (3, 0.137),
    "LiH": (21, 3.161),
    "BeH2": (28, 1.864),
    "H2O": (28, 58.5),
    "NH3": (36, 58.1),
    "N2": (53, 10.5),
    "H4": (None, 1.505),
    "H6": (None, 3.058),
}


@pytest.mark.parametrize("name", sorted(LOW_RANK))
def test_fragments_sum_to_full_ci_and_low_rank_costs_are_reproduced(name: str) -> None:
    count, cost = LOW_RANK[name]
    hamiltonian = molecule_hamiltonian(name)
    energy, vector = full_ci(name)
    state = fragkit.ReferenceState.from_ci_vector(hamiltonian, vector)
    fragments = fragkit.fragment(hamiltonian, fragkit.LowRank(tol=1e-8))
    if count is not None:
        assert len(fragments) == count + 1
    total = fragments.constant + sum(state.moments(f.rotation)[0] @ f.coefficients for f in fragments)
    assert total == pytest.approx(energy, abs=1e-9)
    assert energy == pytest.approx(FULL_CI[name], abs=1e-6)
    plan = fragkit.plan(hamiltonian, state, fragments=fragments, reweight=False)
    assert plan.cost == pytest.approx(cost, rel=0.01)
    # Shots are whole numbers, at least ten each, and shared for a state with a trace of noise.
    assert plan_cost(plan, state) == pytest.approx(plan.cost, rel=5e-3)


def test_water_with_a_hundred_thousand_shots() -> None:
    """One run is within 4 standard errors of full CI, and 300 runs spread as predicted to 10 %."""
    hamiltonian = molecule_hamiltonian("H2O")
    energy, vector = full_ci("H2O")
    assert energy == pytest.approx(-75.017689, abs=1e-6)
    state = fragkit.ReferenceState.from_ci_vector(hamiltonian, vector)
    fragments = fragkit.fragment(hamiltonian, fragkit.LowRank())
    plan = fragkit.plan(hamiltonian, state, fragments=fragments, reweight=False, total_shots=100_000)
    assert plan.total_shots == 100_000
    estimates = [plan.estimate(fragkit.simulate(plan, state, rng=seed)) for seed in range(300)]
    assert abs(estimates[0].energy - energy) < 4 * estimates[0].standard_error
    energies = np.array([estimate.energy for estimate in estimates])
    assert np.std(energies, ddof=1) == pytest.approx(plan.predicted_error, rel=0.10)
    assert abs(np.mean(energies) - energy) < 4 * plan.predicted_error / np.sqrt(300)
    assert np.mean([e.standard_error for e in estimates]) == pytest.approx(plan.predicted_error, rel=0.05)


def test_hydrogen_molecule_of_the_textbook() -> None:
    """Minimal-basis H2 at 1.4 bohr: Szabo & Ostlund, Modern Quantum Chemistry, sections 3.5.2 and 4.1, table values."""
    from pyscf import gto, scf

    mean_field = scf.RHF(gto.M(atom="H 0 0 0; H 0 0 1.4", unit="bohr", basis="sto-3g", verbose=0)).run()
    hamiltonian = fragkit.from_pyscf(mean_field)
    one_body, two_body = hamiltonian.one_body, hamiltonian.two_body
    table = [
        (one_body[0, 0], -1.2528),
        (one_body[1, 1], -0.4756),
        (two_body[0, 0, 0, 0], 0.6746),
        (two_body[0, 0, 1, 1], 0.6636),
        (two_body[1, 1, 1, 1], 0.6975),
        (two_body[0, 1, 0, 1], 0.1813),
        (hamiltonian.determinant_energy(), -1.1167),
    ]
    for computed, printed in table:
        assert computed == pytest.approx(printed, abs=1.5e-4)
    state = fragkit.reference_state(hamiltonian, "fci")
    assert state.energy(hamiltonian) == pytest.approx(-1.1373, abs=1e-4)
    plan = fragkit.plan(hamiltonian, state, total_shots=20_000)
    estimate = plan.estimate(fragkit.simulate(plan, state, rng=5))
    assert abs(estimate.energy + 1.1373) < 4 * estimate.standard_error + 1e-4
