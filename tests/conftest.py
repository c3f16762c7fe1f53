"""Settings for the whole suite."""

from hypothesis import settings

# Timings on a shared machine say nothing about correctness, so no example has a deadline.
settings.register_profile("quick", deadline=None)
settings.register_profile("soak", deadline=None, max_examples=5000)
settings.load_profile("quick")
