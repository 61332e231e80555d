"""What all tests share: one thread for linear algebra, no windows, the same cases on every run."""

import os

from hypothesis import settings

for name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ.setdefault(name, "1")  # before numpy is loaded
os.environ.setdefault("MPLBACKEND", "Agg")

settings.register_profile("same-every-time", derandomize=True, deadline=None)
settings.load_profile("same-every-time")
