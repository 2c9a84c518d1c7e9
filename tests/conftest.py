"""Settings that all tests share."""

from hypothesis import settings

# No test is judged by the clock, and nothing is written into the clone.
settings.register_profile("shared", deadline=None, database=None)
settings.load_profile("shared")
