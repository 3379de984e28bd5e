"""One BLAS thread, as in the command line: several fight with parallel tests and slow them many times."""

from __future__ import annotations

import os

from threadpoolctl import threadpool_limits

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")  # for workers, commands run by tests, and libraries loaded later
threadpool_limits(limits=1, user_api="blas")  # for what plugins of pytest have loaded already
