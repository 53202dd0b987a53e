"""What holds for all tests."""

from __future__ import annotations

import atexit
import os
import shutil
import tempfile

# The matrices of the tests are small: a second thread of the linear algebra only waits for a core that other
# work keeps busy, which costs several times the work itself. Set before NumPy is loaded; programs that tests
# start inherit it.
for name in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ.setdefault(name, "1")

# Results are kept in a folder of this run of the tests, never in the user's own.
os.environ["CAMPAIGN_CACHE"] = tempfile.mkdtemp(prefix="campaign-cache-")
atexit.register(shutil.rmtree, os.environ["CAMPAIGN_CACHE"], ignore_errors=True)
