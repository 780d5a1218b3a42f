"""A cluster for a whole module, and one of its own for a test that breaks it."""

import pytest

from tests.cluster.site import Site


@pytest.fixture(scope="module")
def site(tmp_path_factory):
    """A scheduler with two machines of one worker each."""
    with Site(tmp_path_factory.mktemp("site")) as running:
        running.join("north")
        running.join("south")
        running.ready("north", "south").close()
        yield running


@pytest.fixture
def own_site(tmp_path):
    """A scheduler for one test, with nobody there; a silent worker is given up after some seconds."""
    with Site(tmp_path, ttl=8.0) as running:
        yield running
