"""FCIDUMP files: what other programmes write, what is wrong with some of them, and round trips."""

from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from molecules import FULL_CI, energy_of, mean_field, molecule_hamiltonian

import fragkit
from fragkit.core import Hamiltonian, InputError

HEADER = "&FCI NORB=2,NELEC=2,MS2=0,\n ORBSYM=1,1,\n ISYM=1,\n&END\n"
# Minimal-basis H2 at 1.4 bohr: Szabo & Ostlund, Modern Quantum Chemistry, Dover 1996, section 3.5.2 (p. 162),
# integrals in the molecular orbitals and the nuclear repulsion 1/1.4 (section 4.1 for the full CI energy).
BODY = """\
 0.6746 1 1 1 1
 0.1813 2 1 2 1
 0.6636 2 2 1 1
 0.6975 2 2 2 2
-1.2528 1 1 0 0
-0.4756 2 2 0 0
 0.714285714 0 0 0 0
"""


def write(folder: Path, text: str) -> Path:
    path = folder / "file.fcidump"
    path.write_bytes(text.encode("latin-1"))
    return path


def random_hamiltonian(n: int, seed: int, electrons: tuple[int, int]) -> Hamiltonian:
    rng = np.random.default_rng(seed)
    factors = rng.normal(size=(3, n, n))
    factors = factors + factors.transpose(0, 2, 1)
    one_body = rng.normal(size=(n, n))
    two_body = np.einsum("Qpq,Qrs->pqrs", factors, factors)
    return Hamiltonian(rng.normal(), one_body + one_body.T, two_body, electrons=electrons)


def test_textbook_hydrogen(tmp_path: Path) -> None:
    """Szabo & Ostlund give RHF -1.1167 and full CI -1.1373 hartree."""
    ham = fragkit.from_fcidump(write(tmp_path, HEADER + BODY))
    assert ham.electrons == (1, 1)
    assert ham.determinant_energy() == pytest.approx(-1.1167, abs=2e-4)
    assert energy_of(ham) == pytest.approx(-1.1373, abs=2e-4)
    assert ham.two_body[0, 1, 1, 0] == ham.two_body[1, 0, 0, 1] == 0.1813
    assert ham.two_body[0, 0, 1, 1] == 0.6636


SAME_HEADERS = {
    "slash": "&FCI NORB=2,NELEC=2,MS2=0 /\n",
    "lower case": "&fci norb=2, nelec=2, ms2=0 &end\n",
    "dollar": " $FCI NORB=2 NELEC=2 MS2=0 $END\n",
    "spaces about =": "&FCI NORB = 2 , NELEC= 2, MS2 =0\n/\n",
    "blank lines first": "\n\n  &FCI NORB=2,NELEC=2,\n/\n",
    "more than ten lines": "&FCI NORB=2,\nNELEC=2,\nMS2=0,\nORBSYM=1,\n1,\n" + "\n" * 12 + "ISYM=1,\n&END\n",
    "repeat count": "&FCI NORB=2,NELEC=2,ORBSYM=2*1,ISYM=1 /\n",
    "IUHF off": "&FCI NORB=2,NELEC=2,IUHF=0 /\n",
    "UHF off": "&FCI NORB=2,NELEC=2,UHF=.FALSE. /\n",
    "other names": "&FCI NORB=2,NELEC=2,IPRTIM=-1,INT=7,MEMORY=20000,CORE=0.0, /\n",
}


@pytest.mark.parametrize("name", sorted(SAME_HEADERS))
def test_headers_that_mean_the_same(tmp_path: Path, name: str) -> None:
    ham = fragkit.from_fcidump(write(tmp_path, SAME_HEADERS[name] + BODY))
    assert ham.digest == fragkit.from_fcidump(write(tmp_path, HEADER + BODY)).digest


SAME_BODIES = {
    "D exponents": BODY.replace("0.1813", "1.813D-01").replace("0.6746", "0.6746d0"),
    "exponent without letter": BODY.replace("0.1813", "0.1813+000"),
    "blank lines": BODY.replace(" 0.6636", "\n\n 0.6636") + "\n\n",
    "orbital energies": BODY.replace("-1.2528", "-0.5782 1 0 0 0\n 0.6703 2 0 0 0\n-1.2528"),
    "orbital energies after the constant": BODY + "-0.5782 1 0 0 0\n 0.6703 2 0 0 0\n",
    "constant first": " 0.714285714 0 0 0 0\n" + BODY.replace(" 0.714285714 0 0 0 0\n", ""),
    "other position": BODY.replace("2 1 2 1", "1 2 2 1").replace("2 2 1 1", "1 1 2 2"),
    "four-fold list": BODY + " 0.6636 1 1 2 2\n",
    "repeated entries": BODY + BODY,
    "all eight positions": BODY + "".join(f"0.1813 {a} {3 - a} {b} {3 - b}\n" for a in (1, 2) for b in (1, 2)),
    "rounding noise": BODY + " 0.663600000001 1 1 2 2\n",
    "explicit zeros": BODY + " 0.0 2 1 1 1\n 0.0 2 1 0 0\n",
    "carriage returns": BODY.replace("\n", "\r\n"),
    "no line end": BODY.rstrip("\n"),
}


@pytest.mark.parametrize("name", sorted(SAME_BODIES))
def test_bodies_that_mean_the_same(tmp_path: Path, name: str) -> None:
    ham = fragkit.from_fcidump(write(tmp_path, HEADER + SAME_BODIES[name]))
    assert ham.digest == fragkit.from_fcidump(write(tmp_path, HEADER + BODY)).digest


@pytest.mark.parametrize(
    ("particles", "electrons"), [("NELEC=2,MS2=2", (2, 0)), ("NELEC=2,MS2=-2", (0, 2)), ("NELEC=3,MS2=1", (2, 1))]
)
def test_ms2_is_twice_the_spin_projection(tmp_path: Path, particles: str, electrons: tuple[int, int]) -> None:
    ham = fragkit.from_fcidump(write(tmp_path, f"&FCI NORB=2,{particles} /\n" + BODY))
    assert ham.electrons == electrons


def test_given_electrons_replace_the_header(tmp_path: Path) -> None:
    path = write(tmp_path, "&FCI NORB=2,NELEC=2,MS2=1 /\n" + BODY)
    assert fragkit.from_fcidump(path, electrons=(2, 1)).electrons == (2, 1)


def test_given_constant_serves_files_without_one(tmp_path: Path) -> None:
    path = write(tmp_path, HEADER + BODY.replace(" 0.714285714 0 0 0 0\n", ""))
    assert fragkit.from_fcidump(path, constant=0.5).constant == 0.5


WRONG = {
    "empty file": ("", "line 1: the header must begin with &FCI .*empty"),
    "no header": (BODY, "line 1: the header must begin with &FCI .*0.6746"),
    "header without end": (HEADER.replace("&END\n", "") + BODY, "end of the file.*truncated"),
    "row on the header's last line": ("&FCI NORB=2,NELEC=2 / 0.6746 1 1 1 1\n" + BODY, "line 1: the header's end"),
    "no NORB": ("&FCI NELEC=2 /\n" + BODY, "NORB must be given"),
    "no NELEC": ("&FCI NORB=2 /\n" + BODY, "NELEC must be given"),
    "NORB not a number": ("&FCI NORB=two,NELEC=2 /\n" + BODY, "NORB must be one whole number .*'two'"),
    "NORB zero": ("&FCI NORB=0,NELEC=2 /\n" + BODY, "NORB must be at least 1"),
    "text in the header": ("&FCI water NORB=2,NELEC=2 /\n" + BODY, "names must be followed by '='.*water"),
    "NORB twice": ("&FCI NORB=2,NELEC=2,NORB=3 /\n" + BODY, "NORB must be given once"),
    "odd spin": ("&FCI NORB=2,NELEC=2,MS2=1 /\n" + BODY, "NELEC=2, MS2=1"),
    "too many electrons": ("&FCI NORB=2,NELEC=6 /\n" + BODY, "possible in NORB=2"),
    "ORBSYM too short": ("&FCI NORB=2,NELEC=2,ORBSYM=1, /\n" + BODY, "ORBSYM must list NORB=2 numbers .got 1"),
    "ORBSYM not numbers": ("&FCI NORB=2,NELEC=2,ORBSYM=A1,B1 /\n" + BODY, "ORBSYM must list whole numbers .*A1"),
    "IUHF": ("&FCI NORB=2,NELEC=2,IUHF=1 /\n" + BODY, "unrestricted.*IUHF=1"),
    "UHF": ("&FCI NORB=2,NELEC=2,UHF=.TRUE. /\n" + BODY, r"unrestricted.*UHF=\.TRUE\."),
    "spinors": ("&FCI NORB=2,NELEC=2,TREL=.TRUE. /\n" + BODY, "spinor"),
    "three spin blocks without a flag": (
        HEADER + " 0.5 1 1 1 1\n 0.0 0 0 0 0\n" + BODY,
        r"line 7: .*0.6746 here and 0.5 on line 5.*unrestricted",
    ),
    "complex values": (HEADER + "(0.6746,0.0) 1 1 1 1\n" + BODY, "line 5: values must be real"),
    "three indices": (HEADER + BODY.replace("1 1 1 1", "1 1 1"), "line 5: a row must be a value and four indices"),
    "six words": (HEADER + BODY.replace("1 1 1 1", "1 1 1 1 1"), "line 5: a row must be"),
    "index not whole": (HEADER + BODY.replace("2 1 2 1", "2 1 2 1.5"), "line 6: a row must be"),
    "value not a number": (HEADER + BODY.replace("0.6636", "x.6636"), "line 7: a row must be"),
    "overflow of the format": (HEADER + BODY.replace("0.6636", "******"), "line 7: a row must be"),
    "not finite": (HEADER + BODY.replace("0.6636", "NaN"), "line 7: the value must be finite"),
    "index too large": (HEADER + BODY.replace("2 2 2 2", "2 2 3 3"), "line 8: indices must be in 0 … NORB=2"),
    "negative index": (HEADER + BODY.replace("2 2 2 2", "2 2 -2 2"), "line 8: indices must be in"),
    "zero-based two-electron indices": (HEADER + BODY.replace("2 1 2 1", "1 0 1 0"), "line 6: zero indices must come"),
    "zero in front": (HEADER + BODY.replace("1 1 0 0", "0 0 1 1"), "line 9: zero indices must come last"),
    "contradicting values": (HEADER + BODY + "0.7 1 1 2 2\n", "line 12: .*0.7 here and 0.6636 on line 7"),
    "contradicting transposed one-body": (HEADER + BODY + "0.1 2 1 0 0\n0.2 1 2 0 0\n", "line 13: .*on line 12"),
    "contradicting constant": (HEADER + BODY + "0.2 0 0 0 0\n", "line 12: .*unrestricted"),
    "no constant": (HEADER + BODY.replace(" 0.714285714 0 0 0 0\n", ""), "last row, line 10.*truncated.*constant="),
    "no rows": (HEADER, "a row '<constant> 0 0 0 0' must be present"),
    "cut off inside a row": (HEADER + BODY[:-6], "line 11: a row must be"),
    "not ASCII": (HEADER.replace("2,", "2,\xe9") + BODY, "plain ASCII"),
}


@pytest.mark.parametrize("name", sorted(WRONG))
def test_errors_name_file_line_and_what_was_found(tmp_path: Path, name: str) -> None:
    text, message = WRONG[name]
    with pytest.raises(InputError, match=message) as caught:
        fragkit.from_fcidump(write(tmp_path, text))
    assert "file.fcidump" in str(caught.value)


@pytest.mark.parametrize("name", ["absent.fcidump", "."])
def test_file_that_cannot_be_read(tmp_path: Path, name: str) -> None:
    with pytest.raises(InputError, match="`path` must name"):
        fragkit.from_fcidump(tmp_path / name)


def test_path_must_be_a_path() -> None:
    with pytest.raises(InputError, match="`path` must be a file name"):
        fragkit.from_fcidump(3)


@given(
    n=st.integers(1, 5),
    seed=st.integers(0, 2**32),
    alpha=st.integers(0, 5),
    beta=st.integers(0, 5),
    sparse=st.booleans(),
)
def test_writing_and_reading_gives_the_same_bits(
    tmp_path_factory: pytest.TempPathFactory, n: int, seed: int, alpha: int, beta: int, sparse: bool
) -> None:
    ham = random_hamiltonian(n, seed, (min(alpha, n), min(beta, n)))
    if sparse:
        ham = Hamiltonian(ham.constant, np.diag(np.diag(ham.one_body)), np.zeros((n,) * 4), electrons=ham.electrons)
    path = tmp_path_factory.mktemp("round_trip") / "ham.fcidump"
    back = fragkit.from_fcidump(fragkit.to_fcidump(ham, path))
    assert back.constant == ham.constant
    assert back.electrons == ham.electrons
    assert np.array_equal(back.one_body, ham.one_body)
    assert np.array_equal(back.two_body, ham.two_body)


@pytest.mark.parametrize("name", ["LiH", "NH3"])
def test_files_are_exchanged_with_pyscf_both_ways(tmp_path: Path, name: str) -> None:
    """pyscf's writer is right, and its reader is right for plain restricted files."""
    from pyscf.tools import fcidump

    theirs = tmp_path / "theirs.fcidump"
    fcidump.from_scf(mean_field(name), str(theirs), tol=1e-14)
    ham = fragkit.from_fcidump(theirs)
    # NELEC, MS2 and integrals, through the energy in pyscf's full CI.
    assert energy_of(ham) == pytest.approx(FULL_CI[name], abs=1e-6)
    assert np.max(np.abs(ham.two_body - molecule_hamiltonian(name).two_body)) < 1e-12

    ours = fragkit.to_fcidump(molecule_hamiltonian(name), tmp_path / "ours.fcidump")
    read = fcidump.read(str(ours), verbose=False)
    assert (read["NORB"], read["NELEC"], read["MS2"]) == (ham.orbitals, sum(ham.electrons), 0)
    from pyscf import ao2mo

    two_body = ao2mo.restore(1, read["H2"], ham.orbitals)
    assert np.max(np.abs(two_body - molecule_hamiltonian(name).two_body)) < 1e-15
    assert np.max(np.abs(read["H1"] - molecule_hamiltonian(name).one_body)) < 1e-15
    assert read["ECORE"] == molecule_hamiltonian(name).constant


def test_open_shell_file_is_read_by_pyscf(tmp_path: Path) -> None:
    from pyscf.tools import fcidump

    read = fcidump.read(str(fragkit.to_fcidump(random_hamiltonian(4, 1, (3, 1)), tmp_path / "f")), verbose=False)
    assert (read["NELEC"], read["MS2"]) == (4, 2)


def test_nothing_is_overwritten_unasked(tmp_path: Path) -> None:
    path = tmp_path / "kept.fcidump"
    path.write_text("kept")
    with pytest.raises(InputError, match="overwrite=True"):
        fragkit.to_fcidump(molecule_hamiltonian("H2"), path)
    assert path.read_text() == "kept"
    fragkit.to_fcidump(molecule_hamiltonian("H2"), path, overwrite=True)
    assert fragkit.from_fcidump(path).digest == molecule_hamiltonian("H2").digest


def test_threshold_leaves_out_small_integrals(tmp_path: Path) -> None:
    ham = random_hamiltonian(3, 5, (1, 1))
    small = 0.5
    back = fragkit.from_fcidump(fragkit.to_fcidump(ham, tmp_path / "f", threshold=small))
    kept = np.where(np.abs(ham.two_body) > small, ham.two_body, 0.0)
    assert 0 < np.count_nonzero(kept) < kept.size
    assert np.array_equal(back.two_body, kept)


def test_hamiltonian_from_factors_is_written_as_a_tensor(tmp_path: Path) -> None:
    ham = molecule_hamiltonian("LiH")
    by_factors = Hamiltonian(
        ham.constant, ham.one_body, factors=ham.factors, factor_signs=ham.factor_signs, electrons=ham.electrons
    )
    back = fragkit.from_fcidump(fragkit.to_fcidump(by_factors, tmp_path / "f"))
    assert np.max(np.abs(back.two_body - ham.two_body)) < 1e-10


@given(
    cut=st.integers(0, 400), length=st.integers(0, 40), inserted=st.text("0123456789.-+DEe&/=,( \nnaiNORB", max_size=12)
)
@settings(max_examples=200)
def test_damage_is_an_input_error_or_leaves_a_valid_hamiltonian(
    tmp_path_factory: pytest.TempPathFactory, cut: int, length: int, inserted: str
) -> None:
    """Whatever is cut out of a file or put into it, nothing but InputError is raised."""
    text = HEADER + BODY
    path = write(tmp_path_factory.getbasetemp(), text[:cut] + inserted + text[cut + length :])
    try:
        ham = fragkit.from_fcidump(path)
    except InputError:
        return
    assert np.all(np.isfinite(ham.two_body))
    assert np.isfinite(ham.determinant_energy())
