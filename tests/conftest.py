"""Settings of every test run: one BLAS thread, and examples that are the same each time."""

import os

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")  # read once, when numpy is first imported

from hypothesis import settings

settings.register_profile("repeatable", derandomize=True, deadline=None, database=None)
settings.load_profile("repeatable")
