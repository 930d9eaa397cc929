"""A folder in, made-up certificates, keys and one user out: how a broker and its clients prove themselves."""

import subprocess
from dataclasses import dataclass
from pathlib import Path

from tests.broker.jars import program

__all__ = ["Credentials"]

DAYS = "2"


@dataclass(frozen=True)
class Credentials:
    """PEM files, each readable as it is: no key is encrypted."""

    ca_file: Path
    """Signed the broker's certificate and the client's."""
    broker_file: Path
    """Key and certificate of the broker, for 127.0.0.1 and localhost."""
    cert_file: Path
    key_file: Path
    """Certificate and key of a client."""
    stranger_file: Path
    """A certificate authority that signed nothing of this."""
    username: str = "gauge"
    password: str = "sand-and-gravel"

    @classmethod
    def make(cls, folder: Path) -> "Credentials":
        """Raises Unavailable where there is no openssl."""
        folder.mkdir(parents=True, exist_ok=True)
        ca, stranger = self_signed(folder / "ca"), self_signed(folder / "stranger")
        broker = signed(folder / "broker", "subjectAltName=IP:127.0.0.1,DNS:localhost")
        client = signed(folder / "client", "extendedKeyUsage=clientAuth")
        both = folder / "broker.pem"
        both.write_text(broker.with_suffix(".key").read_text() + broker.read_text())
        return cls(ca, both, client, client.with_suffix(".key"), stranger)


def self_signed(path: Path) -> Path:
    """Writes `path`.crt and `path`.key; returns the certificate."""
    return openssl(path, "-addext", "keyUsage=critical,keyCertSign,cRLSign")


def signed(path: Path, extension: str) -> Path:
    """The same, by the authority beside it."""
    ca = path.with_name("ca")
    by = ["-CA", f"{ca}.crt", "-CAkey", f"{ca}.key", "-addext", "basicConstraints=critical,CA:FALSE"]
    return openssl(path, *by, "-addext", extension)


def openssl(path: Path, *options: str) -> Path:
    """Keys of elliptic curves, made in no time."""
    command = [
        program("openssl", "openssl"),
        "req",
        "-x509",
        "-nodes",
        "-days",
        DAYS,
        "-subj",
        f"/CN={path.name}",
    ]
    command += ["-newkey", "ec", "-pkeyopt", "ec_paramgen_curve:P-256"]
    command += ["-out", f"{path}.crt", "-keyout", f"{path}.key", *options]
    subprocess.run(command, check=True, capture_output=True)
    return Path(f"{path}.crt")
