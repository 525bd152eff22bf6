"""The chain: exposures in, calibrated molecule-by-molecule answer out."""

from __future__ import annotations

import logging
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from xcorr.answer import Curves, Evidence, calibrated_curves, fitted_signal, judge
from xcorr.assemble import ATTRIBUTES, curve_arrays, exposure_arrays, map_arrays
from xcorr.columns import template_columns
from xcorr.config import Settings, check_molecules, load_settings
from xcorr.cube import Cube
from xcorr.engine import ExposureEngine, Sums, add
from xcorr.errors import CoverageError, Note
from xcorr.exposure import PreparedExposure, prepare
from xcorr.inputs import Exposures, describe_position
from xcorr.kernels.threads import limited_threads
from xcorr.provenance import versions
from xcorr.results import RunResult
from xcorr.significance import ring_positions
from xcorr.template import Template

log = logging.getLogger("xcorr.pipeline")
Progress = Callable[[int, int, str], None]
REWEIGHTINGS = 2
NULL_EDGE_KM_S = 3000.0
"""An extracted spectrum has no other positions: its null runs out to here, and 1000 km/s past the searched range."""
MAX_NULL_VELOCITIES = 1500


def run(
    settings: Settings | str | Path,
    *,
    jobs: int | None = None,
    progress: Progress | None = None,
    cubes: Sequence[Cube] | None = None,
    templates: Sequence[Template] | None = None,
    maps: bool = True,
) -> RunResult:
    """Search every molecule of a run file.

    Parameters
    ----------
    settings : Settings, or path of a run file
    jobs : int, optional
        Threads; the result does not depend on it. Default: [run].jobs.
    progress : callable, optional
        Called with (done, total, what).
    cubes : sequence of Cube, optional
        Exposures already in memory, one for each [[exposure]], instead of its file.
    templates : sequence of Template, optional
        Templates already in memory, one for each [[template]], instead of its file.
    maps : bool
        False leaves out the S/N maps of a run with a given position (campaigns).

    Returns
    -------
    RunResult

    Raises
    ------
    XcorrError
        Anything wrong with settings or data, in three parts: what, got, do.
    """
    if not isinstance(settings, Settings):
        settings = load_settings(settings)
    check_molecules(settings)
    report = progress or (lambda done, total, what: None)
    with limited_threads(jobs or settings.run.jobs):
        exposures = Exposures(settings, cubes, templates)
        search = _search(exposures, np.array(settings.velocity_grid()), maps, report)
        return _answer(search, exposures)


@dataclass
class _Search:
    """What the pass over the exposures gathers (positions in pixels of exposure 1)."""

    templates: tuple[Template, ...]
    velocity_km_s: NDArray[np.float64]
    searched: slice
    map_xy: NDArray[np.int64]
    n_positions: int
    target_xy: tuple[float, float] | None = None
    nulls_xy: NDArray[np.float64] = field(default_factory=lambda: np.zeros((0, 2)))
    gram: NDArray[np.float64] | None = None
    records: list[dict[str, Any]] = field(default_factory=list)
    map_num: NDArray[np.float32] | None = None
    map_info: NDArray[np.float32] | None = None
    notes: list[Note] = field(default_factory=list)


def _null_grid(velocity_km_s: NDArray) -> tuple[NDArray[np.float64], slice]:
    """The searched velocities extended on both sides at the same step, and where they lie in it."""
    n = velocity_km_s.size
    if n < 2:
        return velocity_km_s, slice(0, n)
    step = velocity_km_s[1] - velocity_km_s[0]
    reach = max(1000.0, NULL_EDGE_KM_S - float(np.abs(velocity_km_s).max()))
    more = min(int(reach / step), max(0, (MAX_NULL_VELOCITIES - n) // 2))
    below = velocity_km_s[0] - step * np.arange(more, 0, -1)
    above = velocity_km_s[-1] + step * np.arange(1, more + 1)
    return np.concatenate([below, velocity_km_s, above]), slice(more, more + n)


class _Engines:
    """Engines of the exposures, kept where the memory allows it and made again where it does not."""

    def __init__(self, exposures: Exposures, velocities: NDArray) -> None:
        self.exposures, self.velocities = exposures, velocities
        self.searched = slice(0, velocities.size)
        self.held: dict[int, ExposureEngine] = {}
        self.templates: tuple[Template, ...] = ()

    def __getitem__(self, i: int) -> ExposureEngine:
        if i not in self.held:
            allowance = self.exposures.settings.run.max_memory_gb * 1e9 / 3.0
            if len(self.exposures) * self.exposures.plane_bytes * 2 > allowance:
                self.held.clear()
            self.held[i] = self._make(i)
        return self.held[i]

    def _make(self, i: int) -> ExposureEngine:
        """Read, prepare and project one exposure."""
        cube = self.exposures.cube(i)
        if i == 0 and cube.is_spectrum and not self.templates:
            self.velocities, self.searched = _null_grid(self.velocities)
        templates = self.exposures.templates(cube, float(np.abs(self.velocities).max()))
        if i == 0:
            self.templates = templates
        scenery, starlight = self.exposures.scenery(i, cube), self.exposures.starlight(cube)
        prepared = prepare(cube, scenery, starlight)
        del cube  # its planes are copied into the exposure: free them before the templates come
        return ExposureEngine(prepared, template_columns(prepared, templates, self.velocities, self.searched))


def _search(exposures: Exposures, velocities: NDArray, maps: bool, report: Progress) -> _Search:
    """Every exposure once, or twice where the position has to be found first."""
    n = len(exposures)
    engines = _Engines(exposures, velocities)
    first = engines[0]
    exposures.first_star = first.exposure.star_xy
    found = _Search(engines.templates, engines.velocities, engines.searched, np.zeros((0, 2), np.int64), 1)
    found.target_xy = (0.0, 0.0) if exposures.is_spectrum else exposures.position(0, first.exposure)
    blind = found.target_xy is None
    if (maps or blind) and not exposures.is_spectrum:
        y, x = np.nonzero(first.exposure.usable)
        found.map_xy = np.stack([x, y], axis=1)
        for i in range(n):
            report(i, 2 * n, f"map of exposure {i + 1}")
            _add_map(found, exposures, engines[i], i)
            if not blind:
                _add_target_once(found, exposures, engines, i, first)
    if blind:
        found.n_positions = len(found.map_xy)
        found.target_xy = _best_position(found)
        found.notes.append(
            Note(
                "blind-search",
                "no position was given: the strongest of the map is reported, the others are its null, and "
                "every map position counts as a trial",
            )
        )
    for i in range(len(found.records), n):
        report(n + i, 2 * n, f"exposure {i + 1}")
        _add_target_once(found, exposures, engines, i, first)
    report(1, 1, "done")
    return found


def _add_target_once(
    found: _Search, exposures: Exposures, engines: _Engines, i: int, first: ExposureEngine
) -> None:
    """Target and null sums of exposure i; the null positions are placed with the first."""
    if i == 0:
        # a blind search may hold exposures or make them again: neither may know the position it found
        known = not exposures.is_spectrum and found.n_positions == 1
        exposures.first_target = found.target_xy if known else None
        if not exposures.is_spectrum:
            _place_nulls(found, first, exposures)
    _add_target(found, exposures, engines[i], i)


def _add_map(found: _Search, exposures: Exposures, engine: ExposureEngine, i: int) -> None:
    """Add one exposure's solo sums to the map, in float32."""
    positions = exposures.to_exposure(i, engine.exposure, found.map_xy)
    shape = (len(positions), *engine.columns.columns.shape[:2])
    if found.map_num is None or found.map_info is None:
        found.map_num, found.map_info = np.zeros(shape, np.float32), np.zeros(shape, np.float32)
    num_map, info_map = found.map_num, found.map_info

    def keep(block: slice, num: NDArray, info: NDArray) -> None:
        num_map[block] += num
        info_map[block] += info

    engine.solo_sums(positions, keep)


def _map_snr(found: _Search) -> NDArray[np.float32]:
    """Raw solo S/N of the map, (n_position, n_molecule, n_velocity)."""
    assert found.map_num is not None  # built just before
    assert found.map_info is not None
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.where(found.map_info > 0, found.map_num / np.sqrt(found.map_info), np.nan)


def _best_position(found: _Search) -> tuple[float, float]:
    """Position of the highest S/N over its own robust spread in the field, any molecule and velocity."""
    snr = _map_snr(found)
    spread = 1.4826 * np.nanmedian(np.abs(snr - np.nanmedian(snr, axis=(0, 2), keepdims=True)), axis=(0, 2))
    scaled = np.nanmax(np.where(np.isfinite(snr), snr, -np.inf), axis=2) / np.maximum(spread, 1e-6)
    best = int(np.argmax(scaled.max(axis=1)))
    return float(found.map_xy[best, 0]), float(found.map_xy[best, 1])


def _place_nulls(found: _Search, first: ExposureEngine, exposures: Exposures) -> None:
    """Check the target's place and choose companion-free positions."""
    exposure = first.exposure
    assert found.target_xy is not None  # a cube always has both here
    assert exposure.psf is not None
    describe_position(found.target_xy, exposure, first.stamps(np.array(found.target_xy)), found.notes)
    found.nulls_xy = ring_positions(
        exposure.shape,
        exposure.usable,
        exposure.star_xy if exposure.star_image is not None else None,
        found.target_xy,
        exposures.settings.target.mask_sources,
        exposure.psf.fwhm_pixels,
    )


def _add_target(found: _Search, exposures: Exposures, engine: ExposureEngine, i: int) -> None:
    """Sums at target and nulls; for an extracted spectrum twice, outliers taken out in between."""
    target_xy = found.target_xy if i == 0 else None
    if i and found.n_positions == 1 and not exposures.is_spectrum:
        target_xy = exposures.position(i, engine.exposure)
    if target_xy is None:
        target_xy = tuple(exposures.to_exposure(i, engine.exposure, np.array([found.target_xy]))[0])
    position = np.array([target_xy], float)
    target = engine.sums(position)
    if exposures.is_spectrum:
        engine = _reweighted(engine, target, found.searched)
        target = engine.sums(position)
    gram = engine.gram(position)
    found.gram = gram if found.gram is None else found.gram + gram
    nulls, null_correlation = None, np.eye(1)
    if len(found.nulls_xy):
        here = exposures.to_exposure(i, engine.exposure, found.nulls_xy)
        nulls, null_correlation = engine.sums(here), _null_correlation(engine, here)
    flux, variance = engine.spectrum(position)
    covered = engine.columns.covered & (engine.exposure.mean_weights > 0)
    stamps = engine.stamps(position)
    psf = engine.exposure.psf
    found.records.append(
        {
            "exposure": _without_planes(engine.exposure),
            "target": target,
            "nulls": nulls,
            "flux": flux,
            "variance": variance,
            "templates": engine.joint.templates,
            "position_xy": target_xy,
            "masked": 1.0 - covered.mean(axis=1),
            "null_correlation": null_correlation,
            "captured": 1.0 if psf is None else stamps.captured_squares(psf),
        }
    )


def _without_planes(exposure: PreparedExposure) -> PreparedExposure:
    """The exposure without its planes, so that many exposures fit in the memory of one."""
    plane, table, factor = np.zeros((0, 0), np.float32), np.zeros((0, 0)), np.zeros((0, 0, 0))
    fit = replace(
        exposure.fit,
        residual=plane,
        band=factor,
        scale=table,
        border=factor,
        corner=factor,
        corner_scale=table,
    )
    return replace(exposure, weights=plane, residual=plane, fit=fit)


def _reweighted(engine: ExposureEngine, target: Sums, searched: slice) -> ExposureEngine:
    """Robust weights of an extracted spectrum: residuals with the templates fitted, then frozen."""
    position = np.zeros((1, 2))
    for _ in range(REWEIGHTINGS):
        snr = np.where(np.isfinite(target.snr()[0]), target.snr()[0], -np.inf)[:, searched]
        index = int(np.unravel_index(np.argmax(snr), snr.shape)[1]) + (searched.start or 0)
        signal = fitted_signal(target, index) @ engine.joint.templates.columns[:, index].astype(float)
        engine = ExposureEngine(engine.exposure.reweighted(signal), engine.columns)
        target = engine.sums(position)
    return engine


def _null_correlation(engine: ExposureEngine, positions_xy: NDArray) -> NDArray[np.float64]:
    """Correlation of null positions through shared spaxels: overlap of their PSFs, (n_null, n_null)."""
    stamps = engine.stamps(positions_xy)
    ny, nx = engine.exposure.shape
    image = np.zeros((len(stamps.spaxels), ny * nx))
    rows, columns = np.nonzero(stamps.spaxels >= 0)
    image[rows, stamps.spaxels[rows, columns]] = stamps.profiles[rows, columns].mean(axis=1)
    gram = image @ image.T
    scale = np.sqrt(np.maximum(np.diagonal(gram), 1e-300))
    return gram / scale[:, None] / scale[None, :]


def _evidence(search: _Search, exposures: Exposures) -> Evidence:
    """Sums over exposures, and what the verdicts need besides."""
    prepared = [record["exposure"] for record in search.records]
    fits = [e.telluric for e in prepared if e.telluric is not None and e.telluric.usable]
    # an offset of the tellurics is a zero point that nobody corrects: part of the error
    zero_points = [np.hypot(fit.velocity_err_km_s, fit.velocity_km_s) for fit in fits]
    nulls = [record["nulls"] for record in search.records]
    assert search.gram is not None  # set with the first exposure
    evidence = Evidence(
        names=exposures.settings.names,
        velocity_km_s=search.velocity_km_s,
        searched=search.searched,
        target=add([record["target"] for record in search.records]),
        gram=search.gram,
        nulls=None if nulls[0] is None else add(nulls),
        position_correlation=np.mean([record["null_correlation"] for record in search.records], axis=0),
        n_positions=search.n_positions,
        resolution_km_s=float(np.mean([e.resolution_km_s for e in prepared])),
        zero_point_err_km_s=float(np.sqrt(np.mean(np.square(zero_points)))) if zero_points else float("nan"),
        systemic_velocity_km_s=exposures.settings.target.systemic_velocity_km_s,
    )
    if not np.any(np.isfinite(evidence.target.snr())):
        raise CoverageError(
            "no usable data at the companion's position",
            "every sample masked, or the position outside all usable spaxels",
            "check [target].companion_xy and the quality planes",
        )
    return evidence


def _answer(search: _Search, exposures: Exposures) -> RunResult:
    """Calibrate, judge and put everything together."""
    settings = exposures.settings
    prepared = [record["exposure"] for record in search.records]
    evidence = _evidence(search, exposures)
    curves = calibrated_curves(evidence)
    in_star_units = all(e.amplitude_in_star_units for e in prepared)
    molecules, notes = judge(
        evidence,
        curves,
        descriptions=[template.description or template.name for template in search.templates],
        units=["star" if t.kind == "full" and in_star_units else "template" for t in search.templates],
        masked_fraction=np.mean([record["masked"] for record in search.records], axis=0),
        captured=float(np.mean([record["captured"] for record in search.records])),
        scatter=1.0
        if exposures.is_spectrum
        else float(np.mean([e.audit.scatter_over_claimed for e in prepared])),
        position_xy=None if exposures.is_spectrum else search.target_xy,
    )
    all_notes = [note for e in prepared for note in e.notes]
    all_notes += [note for template in search.templates for note in template.notes]
    all_notes += search.notes + notes + _null_notes(evidence, curves)
    arrays = curve_arrays(evidence, curves, molecules)
    if search.map_num is not None and search.map_info is not None:
        arrays |= map_arrays(
            search.map_num,
            search.map_info,
            search.map_xy,
            prepared[0].shape,
            search.velocity_km_s,
            curves,
            molecules,
        )
    arrays["null/positions_xy"] = search.nulls_xy
    for i, record in enumerate(search.records):
        arrays |= exposure_arrays(i, record, molecules, evidence)
    return RunResult(
        target=settings.target.name,
        frame="barycentric",
        molecules=molecules,
        warnings=tuple(dict.fromkeys(all_notes)),
        inputs=exposures.inputs(search.templates),
        settings_sha256=settings.sha256,
        seed=settings.run.seed,
        versions=versions(),
        arrays=arrays,
        attributes={name: text for name, text in ATTRIBUTES.items() if name in arrays},
        celestial_header=exposures.headers[0],
    )


def _null_notes(evidence: Evidence, curves: Curves) -> list[Note]:
    """What the user must know about the null sample."""
    notes = []
    families = {law.family for law in curves.laws}
    if "far velocities" in families:
        notes.append(
            Note(
                "null-from-velocities",
                "too few companion-free positions (an extracted spectrum has none): the null is the far velocities",
            )
        )
    for name, excess in zip(evidence.names, curves.far_excess, strict=True):
        if excess > 1.0:
            notes.append(
                Note(
                    "null-families-differ",
                    f"{name}: far velocities at the target scatter {excess:.1f} times more than companion-free "
                    "positions: template mismatch, or something else at that place",
                )
            )
    if "claimed" in families:
        notes.append(
            Note("null-missing", "no null sample could be formed: significance rests on the claimed errors")
        )
    return notes
