"""OpenQASM text, written directly and at full precision.

The gate `givens` uses gates of the standard libraries only. With S on the second qubit X⊗X + Y⊗Y becomes
X⊗Y − Y⊗X; a quarter turn about x makes Y⊗Y into Z⊗Z, and a CNOT makes X⊗X and Z⊗Z into X⊗1 and 1⊗Z. So two CNOT are
enough, which is the least for a rotation of two occupations.
"""

from fragkit.circuits._circuit import RotationCircuit
from fragkit.core import InputError

# rx(±π/2) with the full digits of π/2, so that no parser's own constant comes in.
GIVENS_BODY = (
    "sdg b; rx(1.5707963267948966) a; rx(1.5707963267948966) b; cx a, b; rx(-theta) a; rz(-theta) b; cx a, b; "
    "rx(-1.5707963267948966) a; rx(-1.5707963267948966) b; s b;"
)


def openqasm3(circuit: RotationCircuit, *, preparation: str = "", measure: bool = True) -> str:
    """A complete OpenQASM 3 program: gate definition, optional state preparation, rotations, measurements.

    Parameters
    ----------
    circuit
        The circuit.
    preparation
        OpenQASM 3 statements that prepare the state on the register `q`, inserted before the rotations. Without
        them the program starts from all qubits at zero and is meant to be joined to a preparation.
    measure
        Whether to measure; bit c[j] is then the occupation of new spin-orbital j, alpha first.

    Returns
    -------
    str
        ASCII. Register `q` has one qubit more than the highest device qubit in use.

    Examples
    --------
    >>> import numpy as np
    >>> from fragkit.circuits import rotation_circuits
    >>> print(rotation_circuits([np.eye(1)])[0].to_openqasm3())  # doctest: +ELLIPSIS
    OPENQASM 3.0;
    include "stdgates.inc";
    // Readout of the occupations of rotated orbitals. Written by fragkit ...
    // Jordan-Wigner, blocked layout; c[j] is the occupation of new spin-orbital j, alpha 0 ... 0, then beta.
    qubit[2] q;
    bit[2] c;
    c[0] = measure q[0];
    c[1] = measure q[1];
    <BLANKLINE>
    """
    lines = ["OPENQASM 3.0;", 'include "stdgates.inc";', *header(circuit)]
    if circuit.givens:
        lines.append(f"gate givens(theta) a, b {{ {GIVENS_BODY} }}")
    lines += [f"qubit[{register_size(circuit)}] q;"]
    lines += [f"bit[{circuit.qubit_count}] c;"] if measure else []
    lines += _inserted(preparation)
    lines += [f"givens({theta!r}) q[{a}], q[{b}];" for a, b, theta in circuit.gates()]
    if measure:
        lines += [f"c[{j}] = measure q[{q}];" for j, q in enumerate(circuit.measured_qubits)]
    return "\n".join(lines) + "\n"


def openqasm2(circuit: RotationCircuit, *, preparation: str = "", measure: bool = True) -> str:
    """The same program in OpenQASM 2, for older stacks; arguments as for `openqasm3`.

    Cross, Bishop, Smolin & Gambetta, arXiv:1707.03429 (2017).
    """
    lines = ["OPENQASM 2.0;", 'include "qelib1.inc";', *header(circuit)]
    if circuit.givens:
        lines.append(f"gate givens(theta) a, b {{ {GIVENS_BODY} }}")
    lines += [f"qreg q[{register_size(circuit)}];"]
    lines += [f"creg c[{circuit.qubit_count}];"] if measure else []
    lines += _inserted(preparation)
    lines += [f"givens({theta!r}) q[{a}],q[{b}];" for a, b, theta in circuit.gates()]
    if measure:
        lines += [f"measure q[{q}] -> c[{j}];" for j, q in enumerate(circuit.measured_qubits)]
    return "\n".join(lines) + "\n"


def header(circuit: RotationCircuit) -> list[str]:
    """Comment lines: where the file comes from, what the bits are, and what was left out."""
    from fragkit import __version__

    lines = [f"// Readout of the occupations of rotated orbitals. Written by fragkit {__version__}."]
    lines += [f"// {key}: {text}" for key, text in circuit.provenance]
    lines.append(
        f"// Jordan-Wigner, {circuit.layout} layout; c[j] is the occupation of new spin-orbital j, "
        f"alpha 0 ... {circuit.orbitals - 1}, then beta."
    )
    if circuit.dropped:
        lines.append(
            f"// {circuit.dropped} rotations left out (tolerance {circuit.angle_tolerance:g} rad); total variation "
            f"distance of the probabilities at most {circuit.distribution_bound:.3g}."
        )
    return lines


def register_size(circuit: RotationCircuit) -> int:
    """Size of the qubit register that holds every device qubit in use."""
    return max(circuit.qubits) + 1


def _inserted(preparation: str) -> list[str]:
    if not preparation.strip():
        return []
    if not preparation.isascii():
        bad = next(character for character in preparation if not character.isascii())
        raise InputError(f"`preparation` must be ASCII text (got the character {bad!r})")
    return ["// state preparation", *preparation.strip().splitlines(), "// rotation"]
