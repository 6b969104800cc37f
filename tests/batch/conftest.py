"""Property tests here may meet a kernel's compilation, which no deadline should count."""

from hypothesis import settings

settings.register_profile("compiled", deadline=None)
settings.load_profile("compiled")
