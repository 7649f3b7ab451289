"""Settings for all tests."""

from hypothesis import settings

# A first call compiles; nothing in this suite is timed.
settings.register_profile("untimed", deadline=None)
settings.load_profile("untimed")
