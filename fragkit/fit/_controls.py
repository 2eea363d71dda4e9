"""What the verb hands to a strategy while it runs: progress, the best so far, the checkpoint, the start, the seed."""

import time
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fragkit.fit._checkpoint import Checkpoint, CheckpointFile

Array = NDArray[np.float64]


class Controls:
    """The running state of one call of `fragment`.

    Attributes
    ----------
    rng
        Generator for everything random; the same seed gives the same fragments on the same machine.
    start
        The fragments to continue from, when resuming, or None.
    best
        What `update` was given last.
    """

    def __init__(
        self,
        *,
        rng: np.random.Generator,
        progress: bool = False,
        file: CheckpointFile | None = None,
        start: Checkpoint | None = None,
    ) -> None:
        self.rng = rng
        self.start = start
        self.best: Checkpoint | None = start
        self._began = time.perf_counter()
        self._file = file
        self._bar: Any = None
        if progress:
            from tqdm.auto import tqdm

            self._bar = tqdm(unit="it", desc="fragments")

    @property
    def seconds(self) -> float:
        """Seconds since the call began."""
        return time.perf_counter() - self._began

    def update(self, rotations: Array, coefficients: Array, residual: float, iteration: int) -> None:
        """Tell that these fragments are the best so far; shows the residual and writes the checkpoint when due.

        The arrays are kept, not copied, so the strategy must not change them afterwards.
        """
        self.best = Checkpoint(rotations, coefficients, float(residual), int(iteration))
        if self._bar is not None:
            self._bar.n = iteration
            self._bar.set_postfix_str(f"count {len(rotations)}, residual {residual:.2e} Ha", refresh=False)
            self._bar.refresh()
        if self._file is not None:
            self._file.write_when_due(self.best)

    def close(self) -> None:
        """End the progress bar and bring the checkpoint up to date."""
        if self._bar is not None:
            self._bar.close()
        if self._file is not None and self.best is not None:
            self._file.write(self.best)
