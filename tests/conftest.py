"""Settings that all tests share."""

import os

from hypothesis import settings

# No test is judged by the clock, and nothing is written into the clone. A change is judged by the same examples each
# time; EXPLORE=1 sh tests/run draws new ones.
settings.register_profile("shared", deadline=None, database=None, derandomize=not os.environ.get("EXPLORE"))
settings.load_profile("shared")
