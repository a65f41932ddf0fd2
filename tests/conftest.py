"""Property tests try new examples at every run on a desk, and the same ones in CI: luck should not decide there."""

import os

from hypothesis import settings

settings.register_profile("ci", derandomize=True)
if os.environ.get("CI"):
    settings.load_profile("ci")
