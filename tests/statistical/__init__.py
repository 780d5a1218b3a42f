"""Coverage: how often the statistical procedures keep their promise, with the exact chain as the truth.

`python -m tests.statistical` runs every study in full and prints a table; the suite runs them reduced.
"""
