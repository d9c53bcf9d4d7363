"""Threads of the linear algebra are limited before numpy is loaded: the machines are shared."""

import os

from hypothesis import settings  # loads no numpy

for name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ.setdefault(name, "1")

# the same examples every time where a verdict hangs on it; new ones at the desk
settings.register_profile("repeatable", derandomize=True, deadline=None)
if os.environ.get("CI"):
    settings.load_profile("repeatable")
