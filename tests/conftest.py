"""The examples that Hypothesis draws are the same in every run of the gate; `search` draws new ones."""

from hypothesis import settings

settings.register_profile("gate", deadline=None, derandomize=True)
settings.register_profile("search", deadline=None, max_examples=1000)  # where a test sets no number
settings.load_profile("gate")
