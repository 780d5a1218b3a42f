"""The compiled kernels of the exact chain; numba is imported with the first of them, not with this package."""

from pathlib import Path

from sim.kernel_cache import compiler_for

compiled = compiler_for(Path(__file__).parent)
