"""Laptops with addresses of their own: each a network namespace, whose cable is pulled and plugged in again."""

from __future__ import annotations

import itertools
import os
import shutil
import subprocess

import psutil
import pytest

from tests.cluster import tasks
from tests.cluster.site import Site
from tests.cluster.test_losses import check, numbers

pytestmark = pytest.mark.by_hand
LAPTOPS = ("moor", "tarn")
HOST = "10.213.0.1"


def ip(*arguments):
    return subprocess.run(["ip", *arguments], check=True, capture_output=True, text=True)


@pytest.fixture
def laptops():
    """Name -> the command prefix that runs something on that laptop; skipped where namespaces are not to be had."""
    if os.name != "posix" or shutil.which("ip") is None or os.geteuid() != 0:
        pytest.skip("network namespaces need root and the ip command")
    made = []
    try:
        for number, name in enumerate(LAPTOPS):
            space, here, there = f"brim{os.getpid()}{name}", f"br{name}", f"br{name}-in"
            ip("netns", "add", space)
            made.append(space)
            ip("link", "add", here, "type", "veth", "peer", "name", there, "netns", space)
            ip("addr", "add", f"10.213.{number}.1/24", "dev", here)
            ip("link", "set", here, "up")
            for inside in (
                ("addr", "add", f"10.213.{number}.2/24", "dev", there),
                ("link", "set", there, "up"),
                ("link", "set", "lo", "up"),
                ("route", "add", "default", "via", f"10.213.{number}.1"),
            ):
                ip("-n", space, *inside)
        yield {name: ["ip", "netns", "exec", space] for name, space in zip(LAPTOPS, made, strict=True)}
    except subprocess.CalledProcessError as error:
        pytest.skip(f"this machine allows no network namespaces: {error.stderr.strip()}")
    finally:
        for space in made:
            subprocess.run(["ip", "netns", "del", space], check=False)


def plug(name, laptops, state):
    space = laptops[name][-1]
    ip("-n", space, "link", "set", f"br{name}-in", state)
    if state == "up":  # which forgot its way out
        ip("-n", space, "route", "replace", "default", "via", f"10.213.{LAPTOPS.index(name)}.1")


def test_a_pulled_cable_costs_nothing_and_the_laptop_comes_back(tmp_path, laptops):
    with Site(tmp_path, ttl=8.0, host=HOST) as site:
        for name in LAPTOPS:
            site.join(name, within=laptops[name])
        replies = site.ready(*LAPTOPS).run(tasks.half, numbers(40))
        done = list(itertools.islice(replies, 3))
        plug("tarn", laptops, "down")
        check([*done, *replies], 40)
        plug("tarn", laptops, "up")
        check(list(site.ready(*LAPTOPS).run(tasks.half, numbers(10))), 10)


def test_nothing_listens_in_the_clear_where_others_can_reach_it(tmp_path, laptops):
    """Each process listens on its own address, by TLS; dask's pages are on loopback."""
    with Site(tmp_path, host=HOST) as site:
        site.join("moor", within=laptops["moor"])
        site.ready("moor").close()
        for name, own in (("scheduler", HOST), ("moor", "10.213.0.2")):
            parent = psutil.Process(site.processes[name].pid)
            space = laptops.get(name, [])
            pids = {str(one.pid) for one in (parent, *parent.children(recursive=True))}
            shown = subprocess.run(
                [*space, "ss", "-ltnpH"], capture_output=True, text=True, check=True
            ).stdout
            addresses = {
                line.split()[3].rpartition(":")[0] for line in shown.splitlines()
                if any(f"pid={pid}," in line for pid in pids)
            }  # fmt: skip
            assert own in addresses and addresses <= {own, "127.0.0.1"}
