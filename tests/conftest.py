"""Settings of the whole suite."""

from hypothesis import settings

# The suite says the same every time it runs; `--hypothesis-profile=search` looks for new examples.
settings.register_profile("repeatable", derandomize=True)
settings.register_profile("search", derandomize=False)
settings.load_profile("repeatable")
