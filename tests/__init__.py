"""The tests. Numpy gets one thread a process before anything imports it: workers share the cores as it is."""

import os

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
