"""One profile for all property tests: no time limit per example, as slow machines run them too."""

from hypothesis import settings

settings.register_profile("afterkick", deadline=None)
settings.load_profile("afterkick")
