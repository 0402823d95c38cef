"""Settings of the whole suite."""

import os

from hypothesis import settings

# The suite always tries the same examples, so that a change is judged by itself; POLEWISE_RANDOM=1 lets the search go on to new ones.
settings.register_profile("same_examples", derandomize=True)
settings.register_profile("new_examples", derandomize=False)
settings.load_profile("new_examples" if os.environ.get("POLEWISE_RANDOM") else "same_examples")
