"""Settings for all tests."""

from hypothesis import settings

# A loaded machine is no fault of the code: no deadline. The same examples on every run: a failure can be repeated.
settings.register_profile("repeatable", deadline=None, derandomize=True)
settings.load_profile("repeatable")
