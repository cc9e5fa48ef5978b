"""Scale: thousands of nights, made up or archived, on one machine or a cluster, with the same bits.

What BLAS sums hangs, in its last bit, on its number of threads, so every process that draws has one; the
nanny of a worker sees to the same.
"""

import os

os.environ.setdefault("OMP_NUM_THREADS", "1")
