"""How hypothesis looks for counterexamples: without a clock, and in CI the same ones every time."""

import os

from hypothesis import settings

settings.register_profile("untimed", deadline=None)  # no test asserts how fast it is
settings.register_profile("repeatable", deadline=None, derandomize=True, database=None)
settings.load_profile("repeatable" if os.environ.get("CI") else "untimed")
