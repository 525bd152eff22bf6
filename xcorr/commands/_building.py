"""Template files by the grid, resumable: ``DIR/shards/*.h5`` and ``DIR/manifest.json``."""

from __future__ import annotations

import json
import logging
import os
from collections.abc import Iterator
from dataclasses import asdict, dataclass
from functools import partial
from pathlib import Path
from typing import Any

from xcorr.errors import CoverageError, OutputError, SettingsError
from xcorr.parallel import map_tasks
from xcorr.provenance import sha256_of_file, versions

MANIFEST_SCHEMA = "xcorr-template-manifest-1"
log = logging.getLogger("xcorr.templates")


@dataclass(frozen=True)
class Request:
    """What is to be built: every name at every point of the grid."""

    names: tuple[str, ...]
    wavelength_range_um: tuple[float, float]
    t_eff: tuple[float, ...]
    log_g: tuple[float, ...]

    @classmethod
    def of(
        cls, names: tuple[str, ...], wavelength_range_um: tuple[float, float], t_eff: Any, log_g: Any
    ) -> Request:
        """A request without repetitions; no names means all built-in ones."""
        from xcorr.atmosphere import catalogue

        known = tuple(entry.name for entry in catalogue())
        if unknown := [name for name in names if name not in known]:
            raise SettingsError("no built-in template of that name", unknown[0], f"use {', '.join(known)}")
        low, high = wavelength_range_um
        if not 0 < low < high:
            raise SettingsError(
                "--range must be two positive ascending wavelengths", f"{low:g} {high:g}", "in um"
            )
        chosen = names or known
        unique = [tuple(dict.fromkeys(values)) for values in (chosen, t_eff, log_g)]
        return cls(unique[0], wavelength_range_um, unique[1], unique[2])

    def points(self) -> list[tuple[float, float]]:
        """(t_eff, log_g) of the grid."""
        return [(t_eff, log_g) for t_eff in self.t_eff for log_g in self.log_g]

    def as_json(self) -> dict[str, Any]:
        """Plain values, as the manifest keeps them."""
        return {key: list(value) for key, value in asdict(self).items()}


def build_templates(request: Request, out: Path, *, overwrite: bool, jobs: int) -> Iterator[str]:
    """Make what is missing; yields the path of every template below `out`, in the order of the grid.

    Raises
    ------
    OutputError
        `out` holds something else, or the templates of another request, and `overwrite` is off.
    """
    done = _done(request, out, overwrite)
    fresh = not out.exists()
    shards = out / "shards"
    shards.mkdir(parents=True, exist_ok=True)
    points = request.points()
    labels = [f"T_eff {t_eff:g} K, log g {log_g:g}" for t_eff, log_g in points]
    entries: dict[str, str] = {}
    results = map_tasks(partial(_build_point, request, shards, done), points, jobs=jobs, labels=labels)
    for label, made in zip(labels, results, strict=True):
        if not made:
            continue
        entries |= made
        # Finished points of an earlier, longer run stay in the manifest.
        _write_manifest(request, out, done | entries)
        log.info("%s: %d templates", label, len(made))
        yield from made
    if not entries:
        shards.rmdir()
        if fresh:
            out.rmdir()
        raise CoverageError(
            "nothing could be built", "no template covers the range", "see xcorr templates list"
        )


def _done(request: Request, out: Path, overwrite: bool) -> dict[str, str]:
    """Shards of an earlier run of the same request, by path below `out`, with their digests."""
    manifest = out / "manifest.json"
    if out.exists() and not out.is_dir():
        raise OutputError("the output must be a folder", f"the file {out}", "choose another --out")
    if not out.exists() or not any(out.iterdir()) or overwrite:
        return {}
    try:
        found = json.loads(manifest.read_text(encoding="utf-8"))
        same = found["schema"] == MANIFEST_SCHEMA and found["request"] == request.as_json()
        shards = {str(entry["file"]): str(entry["sha256"]) for entry in found["shards"]} if same else {}
    except (OSError, ValueError, KeyError, TypeError):
        same, shards = False, {}
    if not same or found["versions"] != versions():
        raise OutputError(
            "the output folder holds something else than this request, or other versions made it",
            str(out),
            "add --overwrite or choose another --out",
        )
    return {name: digest for name, digest in shards.items() if _is_whole(out / name, digest)}


def _is_whole(path: Path, digest: str) -> bool:
    return path.is_file() and sha256_of_file(path) == digest


def _build_point(
    request: Request, shards: Path, done: dict[str, str], point: tuple[float, float]
) -> dict[str, str]:
    """Path below the output folder and digest of every template of one grid point."""
    from xcorr.atmosphere import builtin_template
    from xcorr.io.template_files import write_template

    t_eff, log_g = point
    made = {}
    for name in request.names:
        shard = f"shards/{name}_t{t_eff:g}_g{log_g:g}.h5"
        if shard in done:
            made[shard] = done[shard]
            continue
        try:
            template = builtin_template(
                name, wavelength_range_um=request.wavelength_range_um, t_eff=t_eff, log_g=log_g
            )
        except CoverageError as error:
            log.warning("%s left out: %s", name, error)
            continue
        path = shards.parent / shard
        write_template(path, template)
        made[shard] = sha256_of_file(path)
    return made


def _write_manifest(request: Request, out: Path, shards: dict[str, str]) -> None:
    manifest = {
        "schema": MANIFEST_SCHEMA,
        "request": request.as_json(),
        "versions": versions(),
        "shards": [{"file": name, "sha256": digest} for name, digest in sorted(shards.items())],
    }
    partial_path = out / f".manifest.json.partial-{os.getpid()}"
    partial_path.write_text(json.dumps(manifest, indent=2) + "\n", encoding="utf-8")
    os.replace(partial_path, out / "manifest.json")
