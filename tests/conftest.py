"""What all tests share: no screen, nothing written into the repository."""

import os
import tempfile

os.environ.setdefault("MPLBACKEND", "Agg")
os.environ.setdefault("HYPOTHESIS_STORAGE_DIRECTORY", tempfile.mkdtemp(prefix="hypothesis-"))

try:
    from hypothesis import settings
except ImportError:  # only the property tests need it
    pass
else:
    settings.register_profile("popsim", database=None, deadline=None, derandomize=True)
    settings.load_profile("popsim")
