"""What every test shares: hypothesis draws the same examples in every run, and no example is judged by its duration."""

from hypothesis import settings

# Seeded by the test itself, so a run on one machine repeats on another; the machine's speed is no reason to fail.
settings.register_profile("lagscape", derandomize=True, deadline=None, max_examples=60, database=None)
settings.load_profile("lagscape")
