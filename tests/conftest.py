"""Settings of every test run: one thread per process before numpy is loaded, and no clock in hypothesis."""

from __future__ import annotations

import os

for _name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ[_name] = "1"

from hypothesis import HealthCheck, settings  # noqa: E402  (after the thread counts are pinned)

# No deadline: a draw that took long on a busy machine is not a fault, and no test judges absolute seconds.
settings.register_profile(
    "smilewright",
    deadline=None,
    print_blob=True,
    suppress_health_check=[HealthCheck.too_slow, HealthCheck.data_too_large],
)
settings.load_profile("smilewright")
