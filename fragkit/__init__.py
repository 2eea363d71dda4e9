"""Measure molecular energies on quantum processors.

Integrals in; fragments, shot plans and circuits out; counts in; energy, error bar and diagnosis out:

    from_pyscf / from_fcidump / … → fragment → reference_state → plan → plan.circuits() → plan.estimate(counts)

Energies are in hartree, angles in radian. Names below are loaded on first use, so that importing the package is fast.
"""

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from fragkit.circuits import RotationCircuit as RotationCircuit
    from fragkit.core import FragkitError as FragkitError
    from fragkit.core import Fragment as Fragment
    from fragkit.core import Fragmentation as Fragmentation
    from fragkit.core import Hamiltonian as Hamiltonian
    from fragkit.core import InputError as InputError
    from fragkit.core import MismatchError as MismatchError
    from fragkit.core import MissingDependencyError as MissingDependencyError
    from fragkit.core import NotConvergedError as NotConvergedError
    from fragkit.core import TimeModel as TimeModel
    from fragkit.estimate import Counts as Counts
    from fragkit.estimate import Estimate as Estimate
    from fragkit.estimate import simulate as simulate
    from fragkit.files import load_plan as load_plan
    from fragkit.fit import Greedy as Greedy
    from fragkit.fit import Joint as Joint
    from fragkit.fit import LowRank as LowRank
    from fragkit.fit import fragment as fragment
    from fragkit.planning import Plan as Plan
    from fragkit.planning import plan as plan
    from fragkit.readers import from_fcidump as from_fcidump
    from fragkit.readers import from_openfermion as from_openfermion
    from fragkit.readers import from_pyscf as from_pyscf
    from fragkit.readers import hubbard as hubbard
    from fragkit.readers import to_fcidump as to_fcidump
    from fragkit.states import ReferenceState as ReferenceState
    from fragkit.states import mixture as mixture
    from fragkit.states import reference_state as reference_state

__version__ = "0.1.0"

_ROOMS = {
    "fragkit.circuits": ("RotationCircuit",),
    "fragkit.core": (
        "Fragment",
        "Fragmentation",
        "FragkitError",
        "Hamiltonian",
        "InputError",
        "MismatchError",
        "MissingDependencyError",
        "NotConvergedError",
        "TimeModel",
    ),
    "fragkit.estimate": ("Counts", "Estimate", "simulate"),
    "fragkit.files": ("load_plan",),
    "fragkit.fit": ("Greedy", "Joint", "LowRank", "fragment"),
    "fragkit.planning": ("Plan", "plan"),
    "fragkit.readers": ("from_fcidump", "from_openfermion", "from_pyscf", "hubbard", "to_fcidump"),
    "fragkit.states": ("ReferenceState", "mixture", "reference_state"),
}
_HOME = {name: room for room, names in _ROOMS.items() for name in names}

__all__ = sorted(_HOME)  # pyright: ignore[reportUnsupportedDunderAll]


def __getattr__(name: str) -> Any:
    if name not in _HOME:
        raise AttributeError(f"module 'fragkit' has no attribute {name!r}")
    value = getattr(import_module(_HOME[name]), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted({*globals(), *__all__})
