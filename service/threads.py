"""Fixes the thread counts of the linear algebra libraries; must run before numpy is first imported.

numpy and scipy each bring a BLAS pool of their own. The engine spreads its panels over its own threads and
wants one BLAS thread in each, so that the bits of a result do not depend on the number of cores.
"""

import os

BLAS_VARIABLES = ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS", "BLIS_NUM_THREADS")


def fix_blas_threads() -> None:
    """Give every BLAS pool one thread, unless the user has chosen another count."""
    for variable in BLAS_VARIABLES:
        os.environ.setdefault(variable, "1")
