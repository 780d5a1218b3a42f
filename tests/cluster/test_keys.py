"""Keys and addresses: private, of one authority, and never in the clear beyond this machine."""

from __future__ import annotations

import datetime
import os
import stat
import sys

import pytest
from cryptography import x509

from analysis.command.entry import run
from sim.errors import ScenarioError
from sim.machines import keys


def test_keys_are_for_the_owner_alone_whatever_the_umask(tmp_path):
    before = os.umask(0)
    try:
        keys.create(tmp_path / "made" / "here")
    finally:
        os.umask(before)
    files = sorted((tmp_path / "made" / "here").iterdir())
    assert [file.name for file in files] == ["ca.pem", "certificate.pem", "key.pem"]
    assert {stat.S_IMODE(file.stat().st_mode) for file in files} == {0o600}


def test_the_certificate_is_the_authoritys_and_the_authoritys_key_is_nowhere(tmp_path):
    keys.create(tmp_path / "keys")
    authority, certificate = (
        x509.load_pem_x509_certificate((tmp_path / "keys" / name).read_bytes())
        for name in (keys.AUTHORITY, keys.CERTIFICATE)
    )
    certificate.verify_directly_issued_by(authority)
    assert not certificate.extensions.get_extension_for_class(x509.BasicConstraints).value.ca
    assert certificate.not_valid_after_utc - datetime.datetime.now(datetime.UTC) > datetime.timedelta(
        days=700
    )
    [key] = [file for file in (tmp_path / "keys").iterdir() if b"PRIVATE KEY" in file.read_bytes()]
    assert key.name == keys.KEY
    from cryptography.hazmat.primitives.serialization import load_pem_private_key

    own = load_pem_private_key(key.read_bytes(), None).public_key()
    assert own == certificate.public_key() != authority.public_key()


def test_keys_are_never_overwritten(tmp_path):
    keys.create(tmp_path)
    with pytest.raises(ScenarioError, match="must not hold keys already"):
        keys.create(tmp_path)


def test_keys_that_others_can_read_or_that_are_missing_are_refused(tmp_path):
    keys.create(tmp_path)
    keys.security(tmp_path)
    (tmp_path / keys.KEY).chmod(0o640)
    with pytest.raises(ScenarioError, match="readable by nobody else"):
        keys.security(tmp_path)
    (tmp_path / keys.KEY).unlink()
    with pytest.raises(ScenarioError, match=r"key.pem missing"):
        keys.security(tmp_path)


@pytest.mark.parametrize(
    ("given", "full"),
    [
        ("192.168.1.20", "tls://192.168.1.20:8786"),
        ("tarn.local:9000", "tls://tarn.local:9000"),
        ("tls://10.0.0.1:1", "tls://10.0.0.1:1"),
        ("fd00::1", "tls://[fd00::1]:8786"),
        ("[fd00::1]:99", "tls://[fd00::1]:99"),
        ("tcp://127.0.0.1:5", "tcp://127.0.0.1:5"),
        ("tcp://[::1]:5", "tcp://[::1]:5"),
    ],
)
def test_an_address_is_completed(given, full):
    assert keys.full_address(given) == full


@pytest.mark.parametrize(
    "given",
    ["", ":", "host:", "host:0", "host:70000", "http://host:1", "tcp://192.168.1.20:8786", "tcp://0.0.0.0:1"],
)
def test_an_address_that_is_none_or_not_safe_is_a_fault(given):
    with pytest.raises(ScenarioError) as raised:
        keys.full_address(given)
    assert repr(given) in str(raised.value) and "--cluster" in str(raised.value)


def test_missing_packages_are_named_with_the_remedy(monkeypatch, capsys):
    monkeypatch.setitem(sys.modules, "distributed", None)
    monkeypatch.setattr(
        keys.importlib.util, "find_spec", lambda name: None if name == "distributed" else name
    )
    for command in (
        ["simulate", "scenarios/two-units.toml", "--cluster", "10.0.0.1"],
        ["cluster", "create"],
        ["cluster", "status", "10.0.0.1"],
    ):
        assert run(command) == 2
        assert "missing distributed, pip install 'brimline[cluster]'" in capsys.readouterr().err


@pytest.mark.parametrize("host", ["0.0.0.0", "::", "*", "", "192.0.2.7", "no such host"])
def test_a_scheduler_wants_one_address_of_this_machine(host, capsys, tmp_path):
    keys.create(tmp_path)
    assert run(["cluster", "host", "--host", host, "--keys", str(tmp_path)]) == 2
    assert "--host: must be" in capsys.readouterr().err


def test_nothing_starts_without_sound_keys(tmp_path, capsys):
    assert run(["cluster", "host", "--host", "127.0.0.1", "--keys", str(tmp_path)]) == 2
    assert run(["cluster", "join", "127.0.0.1", "--keys", str(tmp_path)]) == 2
    assert run(["cluster", "join", "tcp://127.0.0.1:5", "--keys", str(tmp_path)]) == 2
    assert capsys.readouterr().err.count("--keys: must be a cluster's keys") == 2
