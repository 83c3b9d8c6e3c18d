"""What every test shares: hypothesis draws the same examples in every run, and no example is judged by its duration."""

import sys

from hypothesis import settings

# In the browser Python is several times slower and the machine is already proven natively: fewer examples of the same draw.
EXAMPLES = 12 if sys.platform == "emscripten" else 60

# Seeded by the test itself, so a run on one machine repeats on another; the machine's speed is no reason to fail.
settings.register_profile("lagscape", derandomize=True, deadline=None, max_examples=EXAMPLES, database=None)
settings.load_profile("lagscape")
