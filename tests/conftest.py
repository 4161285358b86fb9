"""One thread for linear algebra: the matrices are tiny, and threads on busy cores only wait."""

import os

for name in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ.setdefault(name, "1")
