"""Settings of the whole test run; no fixtures here."""

import os

# Before NumPy is imported: one thread makes results repeat bit for bit, and leaves the cores to pytest-xdist.
for _variable in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ[_variable] = "1"
os.environ["MPLBACKEND"] = "Agg"

from hypothesis import HealthCheck, settings

_slow_is_fine = {"deadline": None, "suppress_health_check": [HealthCheck.too_slow]}
settings.register_profile("local", max_examples=20, derandomize=True, **_slow_is_fine)
settings.register_profile("ci", max_examples=50, derandomize=True, **_slow_is_fine)
# New examples at every run, for a search before a release: pytest --hypothesis-profile=search
settings.register_profile("search", max_examples=2000, derandomize=False, print_blob=True, **_slow_is_fine)
settings.load_profile("ci" if os.environ.get("CI") else "local")
