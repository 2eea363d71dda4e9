"""Settings that every test shares."""

import os

# Before numpy or pyscf start threads: test workers share the cores, and waiting threads of one were measured to slow
# another's small calculations forty-fold.
for _name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ.setdefault(_name, "1")

from hypothesis import settings  # noqa: E402

# Examples are derived from the test's name, so that a failure on one machine is a failure on all.
settings.register_profile("repeatable", deadline=None, derandomize=True, max_examples=25)
settings.load_profile("repeatable")
