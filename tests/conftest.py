"""What all tests share: one thread of linear algebra, as the service has it, before NumPy is imported."""

import os

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")  # its threads would spin for each other on a shared machine
