"""Floor 0: arrays in, arrays out; numpy and numba only.

Each fast kernel has a plain slow twin in the tests.

Threads come from numba's own work queue unless NUMBA_THREADING_LAYER says otherwise: its idle threads do not
spin, which on a machine with other work made a whole solve four times faster than OpenMP.  The queue serves
one calling thread at a time.
"""

import os

import numba

if "NUMBA_THREADING_LAYER" not in os.environ:
    numba.config.THREADING_LAYER = "workqueue"  # type: ignore[attr-defined]
