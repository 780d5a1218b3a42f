"""Every test of the cluster, the slow ones too (some minutes): `python -m tests.cluster [pytest options]`."""

import sys
from pathlib import Path

import pytest

sys.exit(pytest.main([str(Path(__file__).parent), "-m", "", "-p", "no:cacheprovider", *sys.argv[1:]]))
