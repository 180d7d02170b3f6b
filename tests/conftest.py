"""One thread per test process: the tests run in parallel, and sums do not depend on the number of threads."""

import os

for _name in ("OMP_NUM_THREADS", "MKL_NUM_THREADS", "OPENBLAS_NUM_THREADS"):
    os.environ.setdefault(_name, "1")
