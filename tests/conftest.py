"""Property tests search as long as they need: the machines that run them are slow and shared."""

from hypothesis import settings

settings.register_profile("leadline", deadline=None)
settings.load_profile("leadline")
