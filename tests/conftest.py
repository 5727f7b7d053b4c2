"""One thread for linear algebra, as the command line has it; set before NumPy is imported."""

import os

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
