"""What every test shares: property tests draw the same examples each time, without a clock."""

from hypothesis import settings

settings.register_profile("steady", derandomize=True, deadline=None, max_examples=40)
settings.load_profile("steady")
