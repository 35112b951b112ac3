"""Settings of every test: examples that Hypothesis draws are kept in no file."""

from hypothesis import settings

settings.register_profile("homog", database=None)
settings.load_profile("homog")
