"""Property tests search as long as they need, and the same cases every time: whether a change may land is no matter of
luck. `make fuzz` searches at random."""

from hypothesis import settings

settings.register_profile("leadline", deadline=None, derandomize=True)
settings.load_profile("leadline")
