"""One hypothesis profile for every run: the same examples each time, and no time limits."""

from hypothesis import settings

settings.register_profile("ci", derandomize=True, deadline=None, print_blob=True)
settings.load_profile("ci")
