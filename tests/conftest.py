"""Settings that every test shares."""

from hypothesis import settings

# Examples are derived from the test's name, so that a failure on one machine is a failure on all.
settings.register_profile("repeatable", deadline=None, derandomize=True, max_examples=25)
settings.load_profile("repeatable")
