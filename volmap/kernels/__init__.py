"""Floor 0: arrays in, arrays out; numpy and numba only.

Each fast kernel has a plain slow twin in the tests.

Kernels run on Python's threads (`threads.py`), none on numba's.  numba keeps how many there may be; its own
threads are those of its work queue unless NUMBA_THREADING_LAYER says otherwise, as idle ones do not spin.
"""

import os

import numba

if "NUMBA_THREADING_LAYER" not in os.environ:
    numba.config.THREADING_LAYER = "workqueue"  # type: ignore[attr-defined]
