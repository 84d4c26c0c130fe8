"""What all tests share."""

import os

# Before anything loads the linear algebra: its threads only slow many small fits down.
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
