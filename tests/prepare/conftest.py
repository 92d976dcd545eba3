"""One thread for small matrices: threads that wait for each other make these tests slower, not faster."""

import os

for name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS"):
    os.environ.setdefault(name, "1")
