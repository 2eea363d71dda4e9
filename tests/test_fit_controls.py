"""Interrupts, progress bars, checkpoints and their files."""

import numpy as np
import pytest
from molecules import molecule_hamiltonian

from fragkit.core import InputError, MismatchError
from fragkit.fit import Controls, Fit, Greedy, Joint, fragment


class StopAfter:
    """Runs a strategy and presses Ctrl-C at its n-th report."""

    def __init__(self, strategy, reports: int) -> None:
        self.strategy, self.reports = strategy, reports

    def fit(self, hamiltonian, controls: Controls) -> Fit:
        report = controls.update
        seen = []

        def update(*arguments) -> None:
            report(*arguments)
            seen.append(arguments)
            if len(seen) == self.reports:
                raise KeyboardInterrupt

        controls.update = update
        return self.strategy.fit(hamiltonian, controls)


def test_an_interrupt_is_raised_unless_the_best_so_far_is_asked_for() -> None:
    hamiltonian = molecule_hamiltonian("LiH")
    stopped = StopAfter(Joint(count=8), 6)
    with pytest.raises(KeyboardInterrupt):
        fragment(hamiltonian, stopped)
    fragments = fragment(hamiltonian, stopped, on_interrupt="return")
    assert not fragments.converged
    assert fragments.iterations == 5
    assert len(fragments) == 9
    assert "Interrupted" in fragments.message
    assert "checkpoint" in fragments.message
    assert fragments.residual_norm < np.linalg.norm(hamiltonian.two_body)


def test_an_interrupted_search_returns_a_set_that_reached_the_tolerance(monkeypatch) -> None:
    from fragkit.fit import _joint

    hamiltonian = molecule_hamiltonian("LiH")
    iterate = _joint.levenberg_marquardt
    calls = []

    def counting(*arguments, **options):
        if len(calls) == stop:
            raise KeyboardInterrupt
        calls.append(None)
        return iterate(*arguments, **options)

    stop = -1
    monkeypatch.setattr(_joint, "levenberg_marquardt", counting)
    finished = fragment(hamiltonian, Joint(tol=3e-2, starts=2))
    stop = len(calls) - 1
    calls.clear()
    # The last fit of a search is one with too few fragments, or the one that was found.
    interrupted = fragment(hamiltonian, Joint(tol=3e-2, starts=2), on_interrupt="return")
    assert interrupted.residual_norm <= 3.001e-2
    assert len(interrupted) in (len(finished), len(finished) + 1)


def test_an_interrupt_before_anything_is_known_is_raised() -> None:
    class Never:
        def fit(self, hamiltonian, controls):
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        fragment(molecule_hamiltonian("H2"), Never(), on_interrupt="return")


@pytest.mark.parametrize("strategy", [Joint(count=8), Joint(), Greedy(tol=1e-3)], ids=["joint", "search", "greedy"])
def test_an_interrupted_fit_goes_on_from_its_checkpoint(strategy, tmp_path) -> None:
    hamiltonian = molecule_hamiltonian("LiH")
    path = tmp_path / "fit.npz"
    first = fragment(hamiltonian, StopAfter(strategy, 6), on_interrupt="return", checkpoint=path)
    assert "resume=True" in first.message
    seen = []

    class Watch:
        def fit(self, ham, controls):
            seen.append(controls.start)
            return strategy.fit(ham, controls)

    second = fragment(hamiltonian, Watch(), checkpoint=path, resume=True)
    assert len(seen[0].rotations) == len(first) - 1
    assert seen[0].residual == pytest.approx(first.residual_norm, rel=1e-6)
    assert second.converged
    assert sorted(p.name for p in tmp_path.iterdir()) == ["fit.npz"]


def test_a_finished_checkpoint_gives_the_same_fragments_without_work(tmp_path) -> None:
    hamiltonian = molecule_hamiltonian("LiH")
    path = tmp_path / "fit.npz"
    first = fragment(hamiltonian, Joint(count=8), checkpoint=path)
    again = fragment(hamiltonian, Joint(count=8), checkpoint=path, resume=True)
    assert again.iterations == 0
    assert all(np.array_equal(a.coefficients, b.coefficients) for a, b in zip(first, again, strict=True))


def test_checkpoints_are_neither_overwritten_nor_mixed_nor_trusted(tmp_path) -> None:
    lithium, water = molecule_hamiltonian("LiH"), molecule_hamiltonian("H2O")
    path = tmp_path / "fit.npz"
    with pytest.raises(InputError, match="must exist"):
        fragment(lithium, Joint(count=8), checkpoint=path, resume=True)
    fragment(lithium, Joint(count=8), checkpoint=path)
    with pytest.raises(InputError, match="must not exist"):
        fragment(lithium, Joint(count=8), checkpoint=path)
    with pytest.raises(MismatchError, match="digest"):
        fragment(water, Joint(count=10), checkpoint=path, resume=True)
    with np.load(path, allow_pickle=False) as stored:
        arrays = dict(stored)
    damaged = {
        "a rotation that is none": {**arrays, "rotations": 2.0 * arrays["rotations"]},
        "an odd shape": {**arrays, "coefficients": arrays["coefficients"][:, :3]},
        "another schema": {**arrays, "schema_version": np.array(99)},
        "a pickle": {**arrays, "coefficients": np.array([{"a": 1}], dtype=object)},
        "something missing": {k: v for k, v in arrays.items() if k != "residual"},
    }
    for content in damaged.values():
        np.savez(path, **content)
        with pytest.raises(InputError):
            fragment(lithium, Joint(count=8), checkpoint=path, resume=True)
    path.write_bytes(b"not a zip file")
    with pytest.raises(InputError, match="written by this package"):
        fragment(lithium, Joint(count=8), checkpoint=path, resume=True)
    with pytest.raises(InputError, match="folder that exists"):
        fragment(lithium, Joint(count=8), checkpoint=tmp_path / "nowhere" / "fit.npz")


def test_progress_shows_count_and_residual(capsys) -> None:
    fragment(molecule_hamiltonian("H2"), Joint(count=2), progress=True)
    shown = capsys.readouterr().err
    assert "count 2" in shown
    assert "residual" in shown


def test_without_progress_nothing_is_printed(capsys) -> None:
    fragment(molecule_hamiltonian("H2"), Joint(count=2))
    captured = capsys.readouterr()
    assert captured.out == captured.err == ""


def test_a_time_limit_ends_with_the_best_so_far() -> None:
    fragments = fragment(molecule_hamiltonian("LiH"), Joint(count=6, tol=1e-12, seconds=0.2))
    assert not fragments.converged
    assert "raise `seconds`" in fragments.message
    assert fragments.seconds < 60.0
