"""Settings for every test: fixed hypothesis examples, generated matrices, small shared fixtures.

Compiling dominates the time of the tests, so they compile with less optimisation, as batches of a few points do for
users. An XLA_FLAGS given from outside (also an empty one) is left alone; .ci/run gives an empty one to the slow tests.
"""

import os

from hypothesis import HealthCheck, settings

os.environ.setdefault("XLA_FLAGS", "--xla_backend_optimization_level=0 --xla_cpu_use_fusion_emitters=false")

settings.register_profile(
    "gutz", derandomize=True, deadline=None, suppress_health_check=[HealthCheck.too_slow], max_examples=100
)
settings.load_profile("gutz")
