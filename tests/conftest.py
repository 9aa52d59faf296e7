"""Settings for all tests."""

from hypothesis import settings

# The same examples on every machine and every run: a failure must not come and go.
settings.register_profile("gradcheck", derandomize=True, deadline=None)
settings.load_profile("gradcheck")
