"""Who may belong to a cluster: a private authority, one certificate, and addresses that are safe to use.

Whoever can speak to a scheduler can run code on every machine behind it. So each side proves by a certificate of the
cluster's own authority that it belongs, and nothing is sent in the clear but between processes of one machine.
"""

from __future__ import annotations

import datetime
import importlib.util
import ipaddress
import os
import stat
import sys
from pathlib import Path
from typing import Any

from sim.errors import Fault, ScenarioError

AUTHORITY, CERTIFICATE, KEY = FILES = ("ca.pem", "certificate.pem", "key.pem")
VALID_DAYS = 730
PORT = 8786
PACKAGES = ("distributed", "cryptography")


def require_packages(option: str) -> None:
    """A fault where the packages that a cluster needs are not installed."""
    missing = [name for name in PACKAGES if importlib.util.find_spec(name) is None]
    if missing:
        remedy = "pip install 'brimline[cluster]' on every machine"
        raise _fault(option, "needs packages that are not installed", f"missing {', '.join(missing)}", remedy)


def _fault(key: str, rule: str, value: str, remedy: str) -> ScenarioError:
    return ScenarioError([Fault(None, key, rule, value, remedy)])


def default_folder() -> Path:
    """Where a cluster's keys are kept: $BRIMLINE_CLUSTER_DIR, or below the user's own settings."""
    own = os.environ.get("BRIMLINE_CLUSTER_DIR")
    if own:
        return Path(own)
    base = os.environ.get("APPDATA" if sys.platform == "win32" else "XDG_CONFIG_HOME")
    return Path(base or Path.home() / ".config") / "brimline" / "cluster"


# ---- addresses ----


def full_address(address: str, option: str = "--cluster") -> str:
    """`tls://HOST:PORT` of an address that may lack protocol and port; a fault where it is not safe or no address.

    Plain `tcp://` is for this machine alone: an open scheduler runs anyone's code.
    """
    protocol, there, rest = address.rpartition("://")
    protocol = protocol if there else "tls"
    host, port = _split(rest)
    if not host or not port.isdigit() or not 0 < int(port) < 65536 or protocol not in ("tls", "tcp"):
        remedy = f"give the address that `brimline cluster host` printed, such as tls://192.168.1.20:{PORT}"
        raise _fault(option, "must be HOST, HOST:PORT or tls://HOST:PORT", f"got {address!r}", remedy)
    if protocol == "tcp" and not is_loopback(host):
        rule, remedy = (
            "must be tls:// beyond this machine: an open scheduler runs anyone's code",
            "write tls://",
        )
        raise _fault(
            option, rule, f"got {address!r}", f"{remedy}, and make keys by `brimline cluster create`"
        )
    return f"{protocol}://{f'[{host}]' if ':' in host else host}:{port}"


def _split(rest: str) -> tuple[str, str]:
    """Host and port; an IPv6 host stands in brackets where a port follows."""
    if rest.startswith("["):
        host, _, after = rest[1:].partition("]")
        return host, after.removeprefix(":") or (str(PORT) if not after else "")
    if rest.count(":") > 1:
        return rest, str(PORT)
    host, colon, port = rest.partition(":")
    return host, port if colon else str(PORT)


def is_loopback(host: str) -> bool:
    """Whether a host is this machine and nobody else can reach it there."""
    try:
        return ipaddress.ip_address(host).is_loopback
    except ValueError:
        return host == "localhost"


# ---- the keys ----


def create(folder: Path) -> None:
    """Makes an authority and one certificate for every machine of a cluster, for the owner's eyes only.

    The authority's own key is thrown away: nobody can ever add a second certificate, and new keys are a new cluster.
    A fault where keys are there already, OSError where the folder cannot be written.
    """
    if any((folder / name).exists() for name in FILES):
        remedy = "remove them for a new cluster, or name another folder with --keys"
        raise _fault("--keys", "must not hold keys already", f"got {str(folder)!r}", remedy)
    folder.mkdir(parents=True, exist_ok=True, mode=0o700)
    for name, text in zip(FILES, _pems(), strict=True):
        _write_private(folder / name, text)


def _write_private(file: Path, text: bytes) -> None:
    """Private from the first moment on, whatever the umask."""
    with os.fdopen(os.open(file, os.O_WRONLY | os.O_CREAT | os.O_EXCL, 0o600), "wb") as out:
        if hasattr(os, "fchmod"):
            os.fchmod(out.fileno(), 0o600)
        out.write(text)


def _pems() -> tuple[bytes, bytes, bytes]:
    """The authority's certificate, the machines' certificate, and the key of the latter, as PEM."""
    from cryptography.hazmat.primitives import serialization
    from cryptography.hazmat.primitives.asymmetric import ec

    authority_key, key = (ec.generate_private_key(ec.SECP256R1()) for _ in range(2))
    authority = _certificate("brimline cluster authority", authority_key, authority_key, None)
    certificate = _certificate("brimline cluster machine", key, authority_key, authority)
    encoding = serialization.Encoding.PEM
    private = key.private_bytes(
        encoding, serialization.PrivateFormat.PKCS8, serialization.NoEncryption()
    )  # fmt: skip
    return authority.public_bytes(encoding), certificate.public_bytes(encoding), private


def _certificate(name: str, key: Any, signer: Any, authority: Any) -> Any:
    """A certificate for `key`, signed by `signer`; `authority` None for the authority's own."""
    from cryptography import x509
    from cryptography.hazmat.primitives import hashes
    from cryptography.x509.oid import ExtendedKeyUsageOID, NameOID

    subject = x509.Name([x509.NameAttribute(NameOID.COMMON_NAME, name)])
    now = datetime.datetime.now(datetime.UTC)
    own = authority is None
    builder = (
        x509.CertificateBuilder()
        .subject_name(subject)
        .issuer_name(subject if own else authority.subject)
        .public_key(key.public_key())
        .serial_number(x509.random_serial_number())
        .not_valid_before(now - datetime.timedelta(days=1))  # clocks of laptops differ
        .not_valid_after(now + datetime.timedelta(days=VALID_DAYS))
        .add_extension(x509.BasicConstraints(ca=own, path_length=0 if own else None), critical=True)
        .add_extension(_usage(own), critical=True)
        .add_extension(x509.SubjectKeyIdentifier.from_public_key(key.public_key()), critical=False)
        .add_extension(
            x509.AuthorityKeyIdentifier.from_issuer_public_key(signer.public_key()), critical=False
        )
    )
    if not own:
        both = x509.ExtendedKeyUsage([ExtendedKeyUsageOID.SERVER_AUTH, ExtendedKeyUsageOID.CLIENT_AUTH])
        builder = builder.add_extension(both, critical=False)
    return builder.sign(signer, hashes.SHA256())


def _usage(authority: bool) -> Any:
    from cryptography import x509

    return x509.KeyUsage(
        digital_signature=not authority, key_cert_sign=authority, crl_sign=authority,
        content_commitment=False, key_encipherment=False, data_encipherment=False, key_agreement=False,
        encipher_only=False, decipher_only=False,
    )  # fmt: skip


def security(folder: Path) -> Any:
    """dask's security settings for the keys of a folder; a fault where they are missing or others can read them."""
    import ssl

    from distributed.security import Security

    _check(folder)
    authority, certificate, key = (str(folder / name) for name in FILES)
    roles = ("client", "scheduler", "worker")
    return Security(
        require_encryption=True,
        tls_ca_file=authority,
        tls_min_version=ssl.TLSVersion.TLSv1_3,
        **{f"tls_{role}_cert": certificate for role in roles},
        **{f"tls_{role}_key": key for role in roles},
    )


def _check(folder: Path) -> None:
    missing = [name for name in FILES if not (folder / name).is_file()]
    if missing:
        said = f"{', '.join(missing)} missing in {str(folder)!r}"
        remedy = "copy the folder that `brimline cluster create` made, or name it with $BRIMLINE_CLUSTER_DIR"
        raise _fault("--keys", "must be a cluster's keys", said, remedy)
    if os.name == "posix" and stat.S_IMODE((folder / KEY).stat().st_mode) & 0o077:
        remedy = f"chmod 600 {folder}/*.pem; if anyone may have read it, make new keys"
        raise _fault("--keys", "must be readable by nobody else", f"got {str(folder / KEY)!r}", remedy)
