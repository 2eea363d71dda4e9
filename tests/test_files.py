"""Saved files come back the same to the last bit, and damaged or foreign ones are refused."""

import dataclasses
import json
import os
import stat
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from molecules import molecule_hamiltonian

import fragkit
from fragkit.core import Fragment, Fragmentation, Hamiltonian, InputError, MismatchError, write_atomically
from fragkit.files import load_fragmentation, load_hamiltonian, load_plan, save_fragmentation, save_hamiltonian
from fragkit.files._schema import content_digest
from fragkit.planning import Plan, PlanBound


def some_plan(seed: int = 0, n: int = 3, count: int = 4, *, bare: bool = False) -> Plan:
    rng = np.random.default_rng(seed)
    fragments = []
    for _ in range(count):
        rotation = np.linalg.qr(rng.normal(size=(n, n)))[0]
        fragments.append(Fragment.from_coefficients(rotation, rng.normal(size=n * n + n)))
    details: dict[str, Any] = {}
    if not bare:
        details = {
            "sector_exact": True,
            "target_error": 1.6e-3,
            "reference": "configuration interaction, 1 % noise",
            "bound": PlanBound(0.1, 0.2, "Größe ≤ 3"),
            "diagnostics": {"hf": 0.3, "5 % noise": 1e-17},
            "converged": False,
            "message": "stopped early",
            "method": "given",
            "seconds": 0.25,
        }
    return Plan(
        fragments=tuple(fragments),
        constant=rng.normal(),
        shots=rng.integers(1, 10**9, size=count),
        deviations=rng.random(count),
        electrons=(2, 1),
        hamiltonian_digest="ab" * 32,
        residual_norm=1e-12,
        energy_bound=2e-12,
        **details,
    )


def assert_same(one: Any, other: Any) -> None:
    """Equal to the last bit, field by field, so that a new field cannot be forgotten in the file."""
    assert type(one) is type(other)
    for field in dataclasses.fields(one):
        a, b = getattr(one, field.name), getattr(other, field.name)
        if field.name == "fragments":
            assert len(a) == len(b)
            for x, y in zip(a, b, strict=True):
                assert_same(x, y)
        elif dataclasses.is_dataclass(a):
            assert_same(a, b)
        elif isinstance(a, np.ndarray):
            assert a.dtype == b.dtype, field.name
            assert np.array_equal(a, b), field.name
        else:
            assert a == b, field.name


@given(seed=st.integers(0, 2**32), n=st.integers(2, 4), count=st.integers(1, 4), bare=st.booleans())
def test_plan_comes_back_the_same(
    tmp_path_factory: pytest.TempPathFactory, seed: int, n: int, count: int, bare: bool
) -> None:
    plan = some_plan(seed, n, count, bare=bare)
    path = tmp_path_factory.mktemp("plan") / "water.plan.json"
    plan.save(path)
    back = fragkit.load_plan(path)
    assert_same(plan, back)
    assert back.digest == plan.digest
    assert back.predicted_error == plan.predicted_error


def test_fragmentation_comes_back_the_same(tmp_path: Path) -> None:
    ham = molecule_hamiltonian("LiH")
    fragments = Fragmentation.of(
        ham, some_plan(n=ham.orbitals).fragments, converged=False, message="given", iterations=7, seconds=0.5
    )
    back = load_fragmentation(save_fragmentation(fragments, tmp_path / "lih.json"))
    assert_same(fragments, back)
    back.check_belongs_to(ham)
    with pytest.raises(MismatchError, match="must be fitted to the Hamiltonian"):
        back.check_belongs_to(molecule_hamiltonian("H2O"))


@pytest.mark.parametrize("by_factors", [False, True])
def test_hamiltonian_comes_back_the_same(tmp_path: Path, by_factors: bool) -> None:
    ham = molecule_hamiltonian("H2O")
    if by_factors:
        ham = Hamiltonian(
            ham.constant, ham.one_body, factors=ham.factors, factor_signs=ham.factor_signs, electrons=(5, 4)
        )
    back = load_hamiltonian(save_hamiltonian(ham, tmp_path / "water.npz"))
    assert back.digest == ham.digest
    assert back.from_factors == ham.from_factors
    assert (back.constant, back.electrons) == (ham.constant, ham.electrons)
    assert np.array_equal(back.one_body, ham.one_body)
    assert np.array_equal(back.factors if by_factors else back.two_body, ham.factors if by_factors else ham.two_body)


def test_file_says_what_it_is_and_can_be_used_without_fragkit(tmp_path: Path) -> None:
    """The energy of a bitstring from the file's own statement of its conventions, in plain Python."""
    plan = some_plan(n=3)
    plan.save(tmp_path / "plan.json")
    text = json.loads((tmp_path / "plan.json").read_text(encoding="utf-8"))
    assert (text["schema_name"], text["schema_version"]) == ("fragkit_plan", 1)
    assert text["provenance"] == {
        "creator": "fragkit",
        "version": fragkit.__version__,
        "routine": "fragkit.files.save_plan",
    }
    assert text["units"]["energy"] == "hartree"
    assert all(key == key.lower() for key in text)
    alpha, beta = [1, 0, 1], [0, 1, 1]
    fragment = text["fragments"][1]
    value = sum(fragment["linear"][i] * (alpha[i] + beta[i]) for i in range(3))
    value += sum(fragment["opposite_spin"][i][i] * alpha[i] * beta[i] for i in range(3))
    for i, j in ((0, 1), (0, 2), (1, 2)):
        value += fragment["opposite_spin"][i][j] * (alpha[i] * beta[j] + alpha[j] * beta[i])
        value += fragment["same_spin"][i][j] * (alpha[i] * alpha[j] + beta[i] * beta[j])
    bits = np.array([alpha + beta], dtype=np.uint8)
    assert value == pytest.approx(plan.fragments[1].values(bits)[0], abs=1e-12)


def test_reformatting_by_other_tools_is_no_change(tmp_path: Path) -> None:
    """Spaces, order of keys, and whole floats written as integers keep the digest."""
    plan = some_plan(bare=True)
    plan.save(tmp_path / "plan.json")
    entries = json.loads((tmp_path / "plan.json").read_text(encoding="utf-8"))
    assert entries["seconds"] == 0.0
    entries["seconds"] = 0
    text = json.dumps(dict(sorted(entries.items())), ensure_ascii=True)
    (tmp_path / "other.json").write_text(text, encoding="utf-8")
    assert_same(load_plan(tmp_path / "other.json"), plan)


def _edit(change: Callable[[dict[str, Any]], None], *, sign: bool = False) -> Callable[[str], str]:
    """Change entries; with `sign` the content digest is made anew, as a programme of someone else might do."""

    def apply(text: str) -> str:
        entries = json.loads(text)
        change(entries)
        if sign:
            entries["digest"] = content_digest(entries)
        return json.dumps(entries)

    return apply


def _set(*place: Any, value: Any) -> Callable[[dict[str, Any]], None]:
    def change(entries: Any) -> None:
        for key in place[:-1]:
            entries = entries[key]
        entries[place[-1]] = value

    return change


DAMAGED = {
    "cut off": (lambda text: text[: len(text) // 2], "complete JSON file .*cut off"),
    "empty": (lambda text: "", "complete JSON file"),
    "not JSON": (lambda text: "circuit shots", "complete JSON file .*line 1"),
    "a list": (lambda text: "[1, 2]", "no schema_name.*not a file of this package"),
    "foreign": (lambda text: '{"schema_name": "qcschema_output"}', "'qcschema_output'.*not a file of this package"),
    "counts": (lambda text: '{"schema_name": "fragkit_counts"}', "read it with fragkit.files.load_counts"),
    "newer": (_edit(_set("schema_version", value=2)), "schema_version 1 or older .got 2, written by version 0.*update"),
    "version not whole": (_edit(_set("schema_version", value="1")), "whole schema_version"),
    "shots edited": (_edit(_set("shots", 0, value=5)), "as it was written"),
    "coefficient edited": (_edit(_set("fragments", 1, "linear", 0, value=0.5)), "as it was written"),
    "digest removed": (_edit(lambda entries: entries.pop("digest") and None), "as it was written .*None"),
    "not finite": (lambda text: text.replace('"constant": ', '"constant": NaN, "x": '), "finite numbers .*NaN"),
    "entry missing": (_edit(lambda e: e.pop("shots") and None, sign=True), "`shots` must be present"),
    "wrong type": (_edit(_set("message", value=3), sign=True), "`message` must be str .got int"),
    "true for a number": (_edit(_set("constant", value=True), sign=True), "`constant` must be int or float .got bool"),
    "no fragments": (_edit(_set("fragments", value=[]), sign=True), "at least one fragment"),
    "fragment not an object": (_edit(_set("fragments", 2, value=1), sign=True), r"`fragments\[2\]` must be an object"),
    "array of wrong shape": (
        _edit(_set("fragments", 1, "linear", value=[1.0]), sign=True),
        r"`fragments\[1\].linear` must have shape \(3,\)",
    ),
    "rotation not orthogonal": (
        _edit(_set("fragments", 1, "rotation", 0, value=[1.0, 2.0, 3.0]), sign=True),
        r"`fragments\[1\]`: `rotation` must be orthogonal",
    ),
    "electrons": (_edit(_set("electrons", value=[1]), sign=True), "`electrons` must be two whole numbers"),
    "orbitals": (_edit(_set("orbitals", value=0), sign=True), "`orbitals` must be at least 1"),
    "zero shots": (_edit(_set("shots", 0, value=0), sign=True), "`shots` must be whole numbers of at least 1"),
}


@pytest.mark.parametrize("name", sorted(DAMAGED))
def test_damaged_and_foreign_files_are_refused(tmp_path: Path, name: str) -> None:
    change, message = DAMAGED[name]
    some_plan().save(tmp_path / "good.json")
    bad = tmp_path / "bad.json"
    bad.write_text(change((tmp_path / "good.json").read_text(encoding="utf-8")), encoding="utf-8")
    with pytest.raises(InputError, match=message) as caught:
        load_plan(bad)
    assert name == "zero shots" or "bad.json" in str(caught.value)


def test_fragments_that_do_not_have_the_stated_plan_digest_are_refused(tmp_path: Path) -> None:
    some_plan().save(tmp_path / "plan.json")
    change = _edit(_set("fragments", 0, "linear", 0, value=0.5), sign=True)
    text = change((tmp_path / "plan.json").read_text(encoding="utf-8"))
    (tmp_path / "plan.json").write_text(text, encoding="utf-8")
    with pytest.raises(MismatchError, match="plan digest"):
        load_plan(tmp_path / "plan.json")


def test_each_kind_of_file_names_the_reader_of_the_others(tmp_path: Path) -> None:
    some_plan().save(tmp_path / "plan.json")
    with pytest.raises(InputError, match=r"read it with fragkit\.load_plan"):
        load_fragmentation(tmp_path / "plan.json")
    with pytest.raises(InputError, match="npz archive written by save_hamiltonian"):
        load_hamiltonian(tmp_path / "plan.json")
    save_hamiltonian(molecule_hamiltonian("H2"), tmp_path / "h2.npz")
    with pytest.raises(InputError, match="UTF-8"):
        load_plan(tmp_path / "h2.npz")


def test_damaged_hamiltonian_archives_are_refused(tmp_path: Path) -> None:
    good = save_hamiltonian(molecule_hamiltonian("LiH"), tmp_path / "good.npz")
    data = good.read_bytes()
    bad = tmp_path / "bad.npz"
    for damaged in (b"", data[: len(data) // 2], data[:-1], b"PK" + data[10:]):
        bad.write_bytes(damaged)
        with pytest.raises(InputError, match="must be an npz archive"):
            load_hamiltonian(bad)
    with np.load(good) as archive:
        arrays = {name: archive[name] for name in archive.files}
    changed = dict(arrays, one_body=arrays["one_body"] + np.eye(6))
    np.savez(bad, **changed)
    with pytest.raises(MismatchError, match="digest"):
        load_hamiltonian(bad)
    del changed["two_body"]
    np.savez(bad, **changed)
    with pytest.raises(InputError, match="must hold the arrays"):
        load_hamiltonian(bad)
    np.savez(bad, one_body=np.eye(2))
    with pytest.raises(InputError, match="must be an npz archive"):
        load_hamiltonian(bad)


def test_archives_never_run_code(tmp_path: Path) -> None:
    """An object array would be unpickled, which can run anything; it is refused instead."""
    np.savez(tmp_path / "evil.npz", header=np.array([print], dtype=object))
    with pytest.raises(InputError, match="npz archive"):
        load_hamiltonian(tmp_path / "evil.npz")


@pytest.mark.parametrize("load", [load_plan, load_fragmentation, load_hamiltonian])
def test_missing_files_are_named(tmp_path: Path, load: Callable[[Any], Any]) -> None:
    with pytest.raises(InputError, match=r"existing file .*absent"):
        load(tmp_path / "absent")
    with pytest.raises(InputError, match="readable file"):
        load(tmp_path)


def test_values_that_json_cannot_hold_are_refused_before_writing(tmp_path: Path) -> None:
    plan = dataclasses.replace(some_plan(), energy_bound=float("inf"))
    with pytest.raises(InputError, match="energy_bound` must be finite to be saved"):
        plan.save(tmp_path / "plan.json")
    assert list(tmp_path.iterdir()) == []


def test_saving_replaces_nothing_unasked(tmp_path: Path) -> None:
    path = tmp_path / "plan.json"
    first, second = some_plan(1), some_plan(2)
    first.save(path)
    with pytest.raises(InputError, match="overwrite=True"):
        second.save(path)
    assert_same(load_plan(path), first)
    second.save(path, overwrite=True)
    assert_same(load_plan(path), second)
    assert os.listdir(tmp_path) == ["plan.json"]


def test_interruption_leaves_the_old_file_and_no_rest(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = write_atomically(tmp_path / "kept.txt", "old")

    def fail(*_: Any) -> None:
        raise OSError("disk full")

    for step in ("fsync", "replace"):
        with monkeypatch.context() as patch:
            patch.setattr(os, step, fail)
            with pytest.raises(OSError, match="disk full"):
                write_atomically(path, "new", overwrite=True)
        assert path.read_text() == "old"
        assert os.listdir(tmp_path) == ["kept.txt"]


def test_file_that_appears_meanwhile_is_not_replaced(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = tmp_path / "race.txt"
    sync = os.fsync

    def appear(handle: int) -> None:
        path.write_text("theirs")
        sync(handle)

    monkeypatch.setattr(os, "fsync", appear)
    with pytest.raises(InputError, match="which exists"):
        write_atomically(path, "ours")
    assert path.read_text() == "theirs"
    assert os.listdir(tmp_path) == ["race.txt"]


def test_file_systems_without_hard_links(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def refuse(*_: Any) -> None:
        raise PermissionError("no links here")

    monkeypatch.setattr(os, "link", refuse)
    path = write_atomically(tmp_path / "a.txt", b"data")
    assert path.read_bytes() == b"data"
    with pytest.raises(InputError, match="overwrite=True"):
        write_atomically(path, "new")


def test_permissions_follow_the_umask_or_the_old_file(tmp_path: Path) -> None:
    plain = tmp_path / "plain.txt"
    plain.write_text("")
    path = write_atomically(tmp_path / "a.txt", "x")
    assert stat.S_IMODE(path.stat().st_mode) == stat.S_IMODE(plain.stat().st_mode)
    path.chmod(0o600)
    write_atomically(path, "y", overwrite=True)
    assert stat.S_IMODE(path.stat().st_mode) == 0o600


def test_symbolic_link_stays_a_link(tmp_path: Path) -> None:
    (tmp_path / "link").symlink_to(write_atomically(tmp_path / "real", "old"))
    write_atomically(tmp_path / "link", "new", overwrite=True)
    assert (tmp_path / "link").is_symlink()
    assert (tmp_path / "real").read_text() == "new"


@pytest.mark.parametrize(
    ("name", "message"),
    [("absent/file.txt", "existing folder"), (".", "must name a file"), ("", "must name a file")],
)
def test_places_that_cannot_be_written(tmp_path: Path, name: str, message: str) -> None:
    with pytest.raises(InputError, match=message):
        write_atomically(tmp_path / name, "x")


@pytest.mark.parametrize("path", [3, None, "", b"bytes"])
def test_path_must_be_a_name(path: Any) -> None:
    with pytest.raises(InputError, match="must be a file name"):
        write_atomically(path, "x")


@given(cut=st.integers(0, 4000), length=st.integers(0, 60), inserted=st.text('0123456789.-+eE"[]{}, nul:', max_size=8))
@settings(max_examples=200)
def test_any_damage_is_an_input_error(
    tmp_path_factory: pytest.TempPathFactory, cut: int, length: int, inserted: str
) -> None:
    """Whatever is cut out of a plan or put into it, the file is refused or the plan is the same."""
    folder = tmp_path_factory.getbasetemp()
    plan = some_plan(count=2)
    plan.save(folder / "whole.json", overwrite=True)
    text = (folder / "whole.json").read_text(encoding="utf-8")
    (folder / "damaged.json").write_text(text[:cut] + inserted + text[cut + length :], encoding="utf-8")
    try:
        back = load_plan(folder / "damaged.json")
    except InputError:
        return
    assert_same(back, plan)


def test_example_of_the_documentation_gives_the_energy(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The plain Python of docs/files.md, run as it stands there."""
    page = (Path(__file__).parents[1] / "docs" / "files.md").read_text(encoding="utf-8")
    code = page.split("```python\n")[1].split("```")[0]
    plan = some_plan(n=3)
    plan.save(tmp_path / "water.plan.json")
    monkeypatch.chdir(tmp_path)
    rng = np.random.default_rng(3)
    bits = [rng.integers(0, 2, size=(4, 6)).astype(np.uint8) for _ in plan.fragments]
    space: dict[str, Any] = {"bits": [rows.astype(int).tolist() for rows in bits]}
    exec(code, space)
    means = [fragment.values(rows).mean() for fragment, rows in zip(plan.fragments, bits, strict=True)]
    assert space["energy"] == pytest.approx(plan.constant + sum(means), abs=1e-12)
