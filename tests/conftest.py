"""What all tests share: one thread for linear algebra, no windows, the same cases on every run."""

import os

import pytest
from hypothesis import settings

for name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ.setdefault(name, "1")  # before numpy is loaded
os.environ.setdefault("MPLBACKEND", "Agg")

settings.register_profile("same-every-time", derandomize=True, deadline=None)
settings.load_profile("same-every-time")


def pytest_collection_modifyitems(items: list[pytest.Item]) -> None:
    """Begin with the slow files, so that no process is left alone with one at the end."""
    slow = {item.path for item in items if item.get_closest_marker("slow")}
    items.sort(key=lambda item: item.path not in slow)
