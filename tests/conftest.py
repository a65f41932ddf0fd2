"""Property tests try new examples at every run on a desk, and the same ones in CI: a landing should not hang on luck."""

import os

from hypothesis import settings

settings.register_profile("ci", derandomize=True)
if os.environ.get("CI"):
    settings.load_profile("ci")
