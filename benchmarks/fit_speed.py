"""Time of fits against a plain objective over all n⁴ tensor entries with automatic differentiation.

    python benchmarks/fit_speed.py [--quick]

Part 1: one evaluation of the squared residual with its gradient, for 6 to 24 orbitals (water in larger and larger
spaces: the first n orbitals of cc-pVDZ). Part 2: time to a tolerance against SciPy's L-BFGS on the plain objective.
Part 3: one greedy fragment against a gradient search of its orbitals. All in one run on one machine, best of several
repetitions. The plain objective is written in two ways: fragment by fragment, as the formula reads, and with the
cheapest order of contractions that `jax.numpy.einsum` finds.
"""

# ruff: noqa: B023 - the closures are used only within their own turn of the loop.

import argparse
import resource
import sys
import time
from collections.abc import Callable
from pathlib import Path

import jax
import jax.numpy as jnp
import numpy as np
from scipy.optimize import minimize
from threadpoolctl import threadpool_limits

from fragkit.core import Hamiltonian
from fragkit.fit import Greedy, Joint, LowRank, fragment, residual_and_gradient, target_of
from fragkit.fit._pairs import pair_matrix
from fragkit.fit._point import adjoint, point_at

sys.path.insert(0, str(Path(__file__).parents[1] / "tests"))
from molecules import geometry, molecule_hamiltonian


def rotations_of(turn):
    return jax.vmap(jax.scipy.linalg.expm)(turn - jnp.swapaxes(turn, 1, 2))


def by_fragment(u, l):
    return jnp.sum(jax.vmap(lambda a, b: jnp.einsum("pi,qi,ij,rj,sj->pqrs", a, a, b, a, a))(u, l), axis=0)


def cheapest_order(u, l):
    return jnp.einsum("mpi,mqi,mij,mrj,msj->pqrs", u, u, l, u, u, optimize="optimal")


def plain_objective(tensor_of: Callable) -> Callable:
    def objective(turn, l, tensor):
        return jnp.sum((tensor - tensor_of(rotations_of(turn), 0.5 * (l + jnp.swapaxes(l, 1, 2)))) ** 2)

    return jax.jit(jax.value_and_grad(objective, argnums=(0, 1)))


def best_time(run: Callable, repetitions: int) -> float:
    run()
    times = []
    for _ in range(repetitions):
        began = time.perf_counter()
        run()
        times.append(time.perf_counter() - began)
    return min(times)


def water_space(n: int) -> Hamiltonian:
    """The first n orbitals of water/cc-pVDZ, as a tensor to fit (no one-body part is needed here)."""
    from pyscf import ao2mo, gto, scf

    mol = gto.M(atom=geometry("H2O"), basis="cc-pvdz", verbose=0)
    orbitals = scf.RHF(mol).run().mo_coeff[:, :n]
    tensor = ao2mo.restore(1, ao2mo.kernel(mol, orbitals), n)
    return Hamiltonian(0.0, np.zeros((n, n)), tensor, electrons=(1, 1))


def evaluations(sizes: list[int]) -> None:
    print("One evaluation with gradient, milliseconds, best of several")
    titles = ("orbitals", "fragments", "n^4 by fragment", "n^4 best order", "JAX core", "solver", "ratio", "ratio")
    print("".join(f"{title:>17}" for title in titles))
    for n in sizes:
        count = {24: 30}.get(n, n)
        hamiltonian = water_space(n)
        rng = np.random.default_rng(0)
        turn = 0.1 * rng.normal(size=(count, n, n))
        l = rng.normal(size=(count, n, n))
        l = l + l.transpose(0, 2, 1)
        times = []
        with jax.enable_x64(True):
            tensor = jnp.asarray(hamiltonian.two_body)
            for tensor_of in (by_fragment, cheapest_order):
                objective = plain_objective(tensor_of)
                value, _ = objective(turn, l, tensor)
                times.append(best_time(lambda: jax.block_until_ready(objective(turn, l, tensor)), 7))
            u = np.asarray(rotations_of(turn))
        target, matrix = target_of(hamiltonian), pair_matrix(hamiltonian)
        assert np.isclose(residual_and_gradient(target, u, l)[0], float(value), rtol=1e-9)
        times.append(best_time(lambda: residual_and_gradient(target, u, l), 15))
        with threadpool_limits(1, user_api="blas"):

            def solver() -> None:
                point = point_at(matrix, u, l)
                adjoint(point, point.residual)

            times.append(best_time(solver, 15))
        print(
            f"{n:17d}{count:17d}" + "".join(f"{1e3 * t:17.2f}" for t in times)
            + f"{times[0] / times[3]:17.0f}{times[1] / times[3]:17.1f}",
            flush=True,
        )  # fmt: skip
    print(f"Largest memory of the whole run: {resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1e6:.2f} GB")


def to_tolerance(names: list[tuple[str, int, float]]) -> None:
    print(
        "\nSeconds to a residual (Ha) with compilation, and L-BFGS's residual after its time: plain objective | Joint"
    )
    for name, count, tol in names:
        hamiltonian = molecule_hamiltonian(name)
        n = hamiltonian.orbitals
        low = fragment(hamiltonian, LowRank(count=count))
        rng = np.random.default_rng(0)
        turn = 0.05 * rng.normal(size=(count, n, n))
        first = np.stack([f.rotation for f in low if not f.is_one_body])
        l = np.stack([f.opposite_spin for f in low if not f.is_one_body])
        began = time.perf_counter()
        with jax.enable_x64(True), threadpool_limits(1, user_api="blas"):

            def objective(turn, l, tensor, first):
                u = first @ rotations_of(turn)
                return jnp.sum((tensor - cheapest_order(u, 0.5 * (l + jnp.swapaxes(l, 1, 2)))) ** 2)

            compiled = jax.jit(jax.value_and_grad(objective, argnums=(0, 1)))
            size = turn.size

            def flat(x):
                value, (a, b) = compiled(
                    x[:size].reshape(turn.shape),
                    x[size:].reshape(turn.shape),
                    hamiltonian.two_body,
                    first,
                )
                return float(value), np.concatenate([np.ravel(a), np.ravel(b)])

            found = minimize(
                flat,
                np.concatenate([turn.ravel(), l.ravel()]),
                jac=True,
                method="L-BFGS-B",
                options={"maxiter": 3000, "maxfun": 4000, "ftol": 0.0, "gtol": 1e-14, "maxcor": 20},
            )
        spent = time.perf_counter() - began
        joint = fragment(hamiltonian, Joint(count=count, tol=tol))
        print(
            f"{name:5} {count:3d} fragments: L-BFGS {np.sqrt(found.fun):.1e} after {spent:.1f} s ({found.nit} "
            f"iterations) | {joint.residual_norm:.1e} after {joint.seconds:.2f} s ({joint.iterations} iterations)",
            flush=True,
        )


def greedy_step(names: list[str]) -> None:
    print("\nOne greedy fragment, 8 starts: Jacobi rotations against L-BFGS through the matrix exponential")
    for name in names:
        hamiltonian = molecule_hamiltonian(name)
        n = hamiltonian.orbitals
        ours = min((fragment(hamiltonian, Greedy(count=1)) for _ in range(3)), key=lambda run: run.seconds)
        rng = np.random.default_rng(0)
        with jax.enable_x64(True), threadpool_limits(1, user_api="blas"):

            def gain(x, tensor):
                u = jax.scipy.linalg.expm(x - x.T)
                diagonal = jnp.einsum("pqrs,pi,qi,rj,sj->ij", tensor, u, u, u, u)
                return -jnp.sum(diagonal**2)

            compiled = jax.jit(jax.value_and_grad(gain))

            def flat(x):
                value, slope = compiled(x.reshape(n, n), hamiltonian.two_body)
                return float(value), np.ravel(slope)

            flat(np.zeros(n * n))
            began = time.perf_counter()
            found = [
                minimize(flat, rng.normal(size=n * n), jac=True, method="L-BFGS-B", options={"maxiter": 500})
                for _ in range(8)
            ]
            spent = time.perf_counter() - began
        total = float(np.sum(hamiltonian.two_body**2))
        best = np.sqrt(max(0.0, total + min(f.fun for f in found)))
        print(
            f"{name:5} gradient search {spent:.3f} s without compilation, residual {best:.6f} Ha | "
            f"Jacobi {ours.seconds:.3f} s, {ours.residual_norm:.6f} Ha | ratio {spent / ours.seconds:.0f}",
            flush=True,
        )


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--quick", action="store_true", help="fewer and smaller cases")
    quick = parser.parse_args().quick
    evaluations([6, 10, 14] if quick else [6, 10, 14, 18, 24])
    cases = [("LiH", 8, 1e-8), ("H2O", 10, 1e-8), ("NH3", 12, 1e-8)]
    to_tolerance(cases[:1] if quick else cases)
    greedy_step(["LiH"] if quick else ["LiH", "H2O", "NH3", "N2"])


if __name__ == "__main__":
    main()
