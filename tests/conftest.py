"""Settings for all tests."""

import os

# The matrices are small: threads that wait for each other cost more than they save, above all on a busy machine.
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
