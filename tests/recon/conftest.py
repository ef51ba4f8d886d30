"""Property tests draw the same examples every time and have no deadline: a busy machine must not fail them."""

from hypothesis import settings

settings.register_profile("fallow", deadline=None, derandomize=True)
settings.load_profile("fallow")
