"""Property tests draw the same examples every time, and a busy machine does not fail them."""

from hypothesis import settings

settings.register_profile("estimate", deadline=None, derandomize=True)
settings.load_profile("estimate")
