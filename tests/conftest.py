"""Settings for all tests: generated examples are the same in every run and on every machine, however slow."""

from __future__ import annotations

from hypothesis import settings

settings.register_profile("house", deadline=None, derandomize=True, max_examples=60)
settings.load_profile("house")
