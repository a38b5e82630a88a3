"""Settings that all tests share."""

from hypothesis import settings

settings.register_profile("pathplan", deadline=None)  # how fast a busy machine is says nothing of the code
settings.load_profile("pathplan")
