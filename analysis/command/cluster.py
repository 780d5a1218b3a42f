"""`brimline cluster`: several machines as one, over links that only their owner can open."""

from __future__ import annotations

import platform
import socket
from pathlib import Path
from typing import Any

import click

from analysis.command.caution import CAUTION
from analysis.command.entry import CheckFailed, say
from analysis.command.output import put_json, put_table, put_text
from analysis.command.usage import Checked
from sim.errors import Fault, ScenarioError

SLEEP = {
    "Linux": "systemd-inhibit --what=idle:sleep:handle-lid-switch brimline cluster ...",
    "Darwin": "caffeinate -is brimline cluster ... (a closed lid still sleeps without power and display)",
    "Windows": "powercfg /change standby-timeout-ac 0, and lid: do nothing, in the power options",
}


@click.group(epilog=CAUTION)
def command() -> None:
    """Several machines as one: keys, the scheduler, workers, and who is there.

    One machine makes keys (`create`); all get a copy. One runs `host`, the others (and it) `join`. Then `simulate`,
    `game` or `batch` with `--cluster ADDRESS` runs on all of them, with the same answers.
    """


def _keys(function: Any) -> Any:
    return click.option(
        "--keys", type=click.Path(path_type=Path, file_okay=False),
        help="Folder of the cluster's keys [default: $BRIMLINE_CLUSTER_DIR, or the user's settings].",
    )(function)  # fmt: skip


def _folder(keys: Path | None) -> Path:
    from sim.machines.keys import default_folder

    return (keys or default_folder()).absolute()


def _ready(option: str) -> None:
    from sim.machines.keys import require_packages

    require_packages(option)


@command.command(cls=Checked, short_help="Make the keys of a new cluster.")
@_keys
def create(keys: Path | None) -> None:
    """Make the keys of a new cluster, and tell what to copy where."""
    _ready("brimline cluster")
    from sim.machines.keys import FILES
    from sim.machines.keys import create as create_keys

    folder = _folder(keys)
    create_keys(folder)
    put_text(f"Keys of a new cluster are in {folder}: {', '.join(FILES)}.")
    put_text(
        "Copy the folder to the same place on every machine, by a stick or over ssh, never by mail; set its files to "
        "mode 600.\nWhoever has these files can run code on all of the machines. On the machine that stays on: "
        "brimline cluster host --host ITS-ADDRESS"
    )


@command.command(cls=Checked, short_help="Run the scheduler, until Ctrl-C.")
@click.option("--host", required=True, help="This machine's address in the network that the others are in.")
@click.option("--port", type=click.IntRange(1024, 65535), default=8786, show_default=True)
@_keys
def host(host: str, port: int, keys: Path | None) -> None:
    """Run the scheduler that the others join, until Ctrl-C."""
    _ready("brimline cluster")
    from sim.machines.processes import WORKER_TTL_SECONDS, keep_running

    _usable(host, "--host")
    folder = _checked(keys)
    _advise()
    say(f"on every machine: brimline cluster join {host}:{port}; then run with --cluster {host}:{port}")
    settings = {"host": host, "port": port, "keys": str(folder), "ttl": WORKER_TTL_SECONDS}
    keep_running("scheduler", settings, say=say)


@command.command(cls=Checked, short_help="Lend this machine's cores, until Ctrl-C.")
@click.argument("address")
@click.option("--workers", type=click.IntRange(1, 1024), help="Worker processes [default: the cores].")
@click.option("--host", help="This machine's address [default: the one that reaches the scheduler].")
@click.option("--name", help="What the others call this machine [default: its own name].")
@_keys
def join(address: str, workers: int | None, host: str | None, name: str | None, keys: Path | None) -> None:
    """Lend this machine's cores to the scheduler at ADDRESS, until Ctrl-C."""
    _ready("brimline cluster")
    from sim.machines.ahead import compile_ahead
    from sim.machines.keys import full_address
    from sim.machines.processes import keep_running
    from sim.workers import available_cores

    full = full_address(address, "ADDRESS")
    if not full.startswith("tls"):
        raise _fault("ADDRESS", "must be tls:// for workers", f"got {address!r}", "give HOST:PORT")
    if host is not None:
        _usable(host, "--host")
    folder = _checked(keys)
    _advise()
    compile_ahead(say=say)
    count, called = workers or available_cores(), (name or socket.gethostname()).replace("/", "-")
    say(f"{called} lends {count} workers to {full}; Ctrl-C takes them back")
    settings = {"address": full, "workers": count, "host": host, "name": called, "keys": str(folder)}
    keep_running("worker", settings, say=say)


@command.command(cls=Checked, short_help="Who is at a scheduler.")
@click.argument("address")
@_keys
@click.option("--json", "as_json", is_flag=True, help="One JSON document on standard output.")
def status(address: str, keys: Path | None, as_json: bool) -> None:
    """Who is at the scheduler at ADDRESS, and whether this machine may use them (status 1 if it may use nobody)."""
    _ready("brimline cluster")
    from sim.cluster import Cluster
    from sim.machines.keys import full_address

    cluster = Cluster(full_address(address, "ADDRESS"), _folder(keys))
    try:
        rows = cluster.look()
    finally:
        cluster.close()
    if as_json:
        put_json({"address": cluster.address, "machines": rows})
    else:
        cells = [[row["machine"], row["workers"], "yes" if row["may_help"] else f"no: {row['reason']}",
                  {True: "as here", False: "other", None: "-"}[row["same_bits"]]] for row in rows]  # fmt: skip
        put_table(f"At {cluster.address}", ("machine", "workers", "may help", "bits"), cells)
    if not any(row["may_help"] for row in rows):
        say("no machine that may help; run `brimline cluster join` on one")
        raise CheckFailed


def _fault(key: str, rule: str, value: str, remedy: str) -> ScenarioError:
    return ScenarioError([Fault(None, key, rule, value, remedy)])


def _usable(host: str, option: str) -> None:
    """One address, this machine's own: on all of them a scheduler would be open to networks that nobody thought of."""
    remedy = "give this machine's address in the network that the others are in, such as 192.168.1.20"
    if host in ("", "*", "0.0.0.0", "::", "[::]"):
        raise _fault(option, "must be one address", f"got {host!r}", remedy)
    try:
        found = socket.getaddrinfo(host, 0, type=socket.SOCK_STREAM)[0]
        with socket.socket(found[0]) as probe:
            probe.bind((found[4][0], 0))
    except OSError as error:
        said = f"got {host!r} ({error.strerror or error})"
        raise _fault(option, "must be an address of this machine", said, remedy) from error


def _checked(keys: Path | None) -> Path:
    """The folder of the keys, which must be sound before anything starts."""
    from sim.machines.keys import security

    folder = _folder(keys)
    security(folder)
    return folder


def _advise() -> None:
    """A laptop that sleeps takes its tasks with it, and comes back as a stranger."""
    advice = SLEEP.get(platform.system(), "switch sleep off")
    say(f"keep this machine awake, lid open and on mains power: {advice}")
