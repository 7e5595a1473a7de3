"""Settings that all tests share."""

from __future__ import annotations

import os
from pathlib import Path

from hypothesis import settings

# Before perdure is imported: compiled kernels of the tests stay in the checkout (ignored by git), where the
# next run finds them; the cache of the person who runs the tests is neither used nor filled.
os.environ["PERDURE_CACHE_DIR"] = str(Path(__file__).resolve().parent.parent / ".cache" / "kernels")

# The same examples in every run; no deadline, because a first call may compile a kernel.
settings.register_profile("perdure", deadline=None, derandomize=True, print_blob=True)
settings.load_profile("perdure")
