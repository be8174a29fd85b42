"""One BLAS thread for processes of this package; import it before NumPy.

The matrices here are small: a second thread only waits in a busy loop, and takes the core that
another node needs. Whoever sets the variables keeps what he has set.
"""

import os

for _name in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ.setdefault(_name, "1")
