"""What all tests share: hypothesis without a stopwatch, since machines are noisy, and repeatable in CI."""

import os

from hypothesis import settings

settings.register_profile("house", deadline=None, derandomize=bool(os.environ.get("CI")))
settings.load_profile("house")
