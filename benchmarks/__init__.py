"""Measured figures of the project; run with ``python -m benchmarks [NAME...]``.

Every figure is of one thread: the number of BLAS threads is set here, before anything under this
package imports numpy, because it cannot be changed afterwards.
"""

import os

for _variable in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ[_variable] = "1"
