"""Settings for the whole suite."""

from hypothesis import settings

# Timings on a shared machine say nothing about correctness, so no example has a deadline.
# `make test` draws the same examples every time, so that a change is judged by what it changed; `make fuzz` and `make soak` draw new ones.
settings.register_profile("quick", deadline=None, derandomize=True)
settings.register_profile("soak", deadline=None, derandomize=False, max_examples=5000)
settings.load_profile("quick")
