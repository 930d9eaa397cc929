"""The pom beside this file in, a folder with the broker's jars out: fetched by Maven once, then shared."""

import fcntl
import os
import shutil
import subprocess
from pathlib import Path

__all__ = ["JAVA_PACKAGE", "Unavailable", "class_path", "java", "program"]

POM = Path(__file__).with_name("pom.xml")
FETCH_S = 600
JAVA_PACKAGE = "openjdk-17-jre-headless"


class Unavailable(Exception):
    """This machine cannot run a broker; the message says what is missing and how to get it."""


def java() -> str:
    """The path of the Java that runs the broker."""
    return program("java", JAVA_PACKAGE)


def class_path() -> str:
    """What follows `java -cp`. Two processes that ask at once fetch once."""
    folder = Path(os.environ.get("XDG_CACHE_HOME") or Path.home() / ".cache") / "bedload" / "kafka-4.3.1"
    folder.parent.mkdir(parents=True, exist_ok=True)
    with folder.with_suffix(".lock").open("w") as lock:
        fcntl.flock(lock, fcntl.LOCK_EX)
        if not is_whole(folder):
            fetch(folder)
    return f"{folder}/*"


def is_whole(folder: Path) -> bool:
    """The pom is copied last: where it stands, and is today's, every jar does."""
    copy = folder / POM.name
    return copy.is_file() and copy.read_bytes() == POM.read_bytes()


def fetch(folder: Path) -> None:
    mvn = program("mvn", "maven")
    shutil.rmtree(folder, ignore_errors=True)
    command = [mvn, "-q", "-B", "-f", str(POM), "dependency:copy-dependencies"]
    command += ["-DincludeScope=runtime", f"-DoutputDirectory={folder}"]
    done = subprocess.run(command, capture_output=True, text=True, timeout=FETCH_S)
    if done.returncode:
        raise Unavailable(
            f"Maven could not fetch the broker's jars: {' '.join(command)}: {done.stdout[-2000:]}"
        )
    shutil.copyfile(POM, folder / POM.name)


def program(name: str, package: str) -> str:
    """Its path. Raises Unavailable with the package that has it."""
    path = shutil.which(name)
    if path is None:
        raise Unavailable(f"no {name} on this machine; Debian has it in {package}")
    return path
