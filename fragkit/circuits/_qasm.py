"""OpenQASM text, written directly and at full precision.

The gate `givens` uses gates of the standard libraries only. With S on the second qubit X⊗X + Y⊗Y becomes
X⊗Y − Y⊗X; a quarter turn about x makes Y⊗Y into Z⊗Z, and a CNOT makes X⊗X and Z⊗Z into X⊗1 and 1⊗Z. So two CNOT are
enough.
"""

import re
from collections.abc import Iterable, Sequence

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
        OpenQASM 3 statements that prepare the state on the register `q`, inserted before the rotations; gate
        definitions are allowed, a header or a declaration of `q` is not. Without them the program starts from all
        qubits at zero and is meant to be joined to a preparation.
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
    >>> print(rotation_circuits([np.eye(2)])[0].to_openqasm3())  # doctest: +ELLIPSIS
    OPENQASM 3.0;
    include "stdgates.inc";
    // Readout of the occupations of rotated orbitals. Written by fragkit ...
    // Jordan-Wigner, blocked layout. c[0] ... c[1] are the new alpha orbitals, c[2] ... c[3] the new beta orbitals.
    qubit[4] q;
    bit[4] c;
    c[0] = measure q[0];
    c[1] = measure q[1];
    c[2] = measure q[2];
    c[3] = measure q[3];
    <BLANKLINE>
    """
    return _one_circuit(circuit, 3, preparation, measure)


def openqasm2(circuit: RotationCircuit, *, preparation: str = "", measure: bool = True) -> str:
    """The same program in OpenQASM 2, for older stacks; arguments as for `openqasm3`.

    Cross, Bishop, Smolin & Gambetta, arXiv:1707.03429 (2017).
    """
    return _one_circuit(circuit, 2, preparation, measure)


def _one_circuit(circuit: RotationCircuit, version: int, preparation: str, measure: bool) -> str:
    notes = [f"{key}: {text}" for key, text in circuit.provenance]
    if circuit.dropped:
        notes.append(
            f"Approximate: {circuit.dropped} elements of at most {circuit.angle_tolerance:g} rad left uncleared; "
            f"total variation distance of the probabilities at most {circuit.distribution_bound:.3g}."
        )
    return program(
        version=version,
        orbitals=circuit.orbitals,
        layout=circuit.layout,
        notes=notes,
        gates=((a, b, repr(theta)) for a, b, theta in circuit.gates()),
        inputs=(),
        qubits=circuit.qubits,
        measured=circuit.measured_qubits if measure else None,
        preparation=preparation,
    )


def program(
    *,
    version: int,
    orbitals: int,
    layout: str,
    notes: Iterable[str],
    gates: Iterable[tuple[int, int, str]],
    inputs: Sequence[str],
    qubits: Sequence[int],
    measured: Sequence[int] | None,
    preparation: str,
) -> str:
    """The text of a program whose gates are (qubit, qubit, angle as text)."""
    from fragkit import __version__

    head = 'OPENQASM 3.0;\ninclude "stdgates.inc";' if version == 3 else 'OPENQASM 2.0;\ninclude "qelib1.inc";'
    n = orbitals
    lines = [head, f"// Readout of the occupations of rotated orbitals. Written by fragkit {__version__}."]
    lines += [f"// {note}" for note in notes]
    lines.append(
        f"// Jordan-Wigner, {layout} layout. c[0] ... c[{n - 1}] are the new alpha orbitals, "
        f"c[{n}] ... c[{2 * n - 1}] the new beta orbitals."
    )
    lines += [f"input float[64] {name};" for name in inputs]
    calls = [f"givens({angle}) q[{a}], q[{b}];" for a, b, angle in gates]
    if calls:
        lines.append(f"gate givens(theta) a, b {{ {GIVENS_BODY} }}")
    size = max(qubits) + 1
    lines.append(f"qubit[{size}] q;" if version == 3 else f"qreg q[{size}];")
    if measured is not None:
        lines.append(f"bit[{2 * n}] c;" if version == 3 else f"creg c[{2 * n}];")
    lines += _inserted(preparation)
    lines += calls
    for j, qubit in enumerate(measured or ()):
        lines.append(f"c[{j}] = measure q[{qubit}];" if version == 3 else f"measure q[{qubit}] -> c[{j}];")
    return "\n".join(lines) + "\n"


def register_size(circuit: RotationCircuit) -> int:
    """Size of the qubit register that holds every device qubit in use."""
    return max(circuit.qubits) + 1


def _inserted(preparation: str) -> list[str]:
    if not preparation.strip():
        return []
    if not preparation.isascii():
        bad = next(character for character in preparation if not character.isascii())
        raise InputError(f"`preparation` must be ASCII text (got the character {bad!r})")
    doubled = re.search(r"^\s*(OPENQASM\b|include\b|qubit\[\d+\]\s*q\s*;|qreg\s+q\b)", preparation, re.MULTILINE)
    if doubled:
        raise InputError(
            "`preparation` must be statements without header and without a declaration of `q`, which the program has "
            f"already (got {doubled.group(1)!r}); leave that line out"
        )
    return ["// state preparation", *preparation.strip().splitlines(), "// rotation"]
