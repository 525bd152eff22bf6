"""``xcorr inspect``: what was understood of a file."""

from __future__ import annotations

import json
import math
import tomllib
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from xcorr.commands.options import json_option, log_to_stderr, logging_options

if TYPE_CHECKING:
    from xcorr.inspection import Inspection


@click.command("inspect")
@click.argument("file", type=click.Path(path_type=Path))
@click.option(
    "--set", "assignments", multiple=True, metavar="KEY=VALUE", help="A key of [[exposure]], repeatable."
)
@json_option
@logging_options
def command(file: Path, assignments: tuple[str, ...], as_json: bool, quiet: bool, debug: bool) -> None:
    """Print what was understood of a cube or extracted spectrum."""
    from xcorr.config import parse_exposure

    exposure = parse_exposure({"file": str(file)} | dict(map(assignment, assignments)))
    with log_to_stderr(quiet=quiet, debug=debug):
        from xcorr.inspection import inspect_cube
        from xcorr.io import read_exposure

        inspection = inspect_cube(read_exposure(exposure.file, **exposure.reading()))
    click.echo(as_text(inspection) if not as_json else _as_json(inspection), nl=False)


def assignment(text: str) -> tuple[str, Any]:
    """Key and value of ``key=value``; the value is TOML, or else text.

    Examples
    --------
    >>> assignment("orders=[0, 1]"), assignment("medium=air"), assignment('science_extension="1"')
    (('orders', [0, 1]), ('medium', 'air'), ('science_extension', '1'))
    """
    key, sign, value = text.partition("=")
    if not sign or not key.strip():
        raise click.BadParameter(f"{text!r} is not KEY=VALUE", param_hint="'--set'")
    try:
        return key.strip(), tomllib.loads(f"value = {value}")["value"]
    except tomllib.TOMLDecodeError:
        return key.strip(), value.strip()


def _as_json(inspection: Inspection) -> str:
    from xcorr.io.summary import plain

    return json.dumps({"schema": "xcorr-inspect-1"} | plain(inspection), indent=2, allow_nan=False) + "\n"


def as_text(found: Inspection) -> str:
    """The inspection as aligned lines."""
    size = f"{found.n_wave} channels" + (
        "" if found.kind == "spectrum" else f", {found.nx} x {found.ny} spaxels"
    )
    orders = f" in {found.n_orders} orders" if found.n_orders > 1 else ""
    low, high = found.wavelength_range_um
    lines = [
        ("file", f"{found.file} ({found.kind})"),
        ("size", size + orders),
        ("range", f"{low:.5f}-{high:.5f} um in vacuum (file: {found.medium_of_file})"),
        ("frame", f"{found.frame}{_barycentric(found)}"),
        ("channel", f"{_three(found.channel_km_s)} km/s"),
        ("R", _three(found.resolving_power) if found.resolving_power else "not known: give resolving_power"),
        ("pixels per R", _three(found.pixels_per_resolution_element) if found.resolving_power else "-"),
        ("unit", found.unit or "not stated"),
        ("masked", _masked(found)),
        *((f"plane {name}", text) for name, text in found.planes.items()),
        ("errors", _errors(found)),
        ("sky", "celestial WCS" if found.has_celestial_wcs else "no celestial WCS"),
    ]
    if found.telluric_corrected or found.starlight_removed:
        said = [
            ("tellurics corrected", found.telluric_corrected),
            ("starlight removed", found.starlight_removed),
        ]
        lines.append(("declared", ", ".join(text for text, flag in said if flag)))
    if found.brightest is not None:
        x, y = found.brightest.xy
        width = found.brightest.fwhm_pixels
        fwhm = f"FWHM {width:.2f} pixels" if math.isfinite(width) else "width not measured"
        lines.append(("brightest", f"x {x:.2f}, y {y:.2f}, {fwhm}"))
    lines += [("note", f"{note.message} [{note.code}]") for note in found.notes]
    width = max(len(label) for label, _ in lines)
    return "".join(f"{label.ljust(width)}  {text}\n" for label, text in lines)


def _three(values: tuple[float, float, float] | None) -> str:
    """Median, and the extremes where they differ from it by more than 0.1 per cent."""
    if values is None:
        return "-"
    low, middle, high = values
    if not math.isfinite(middle):
        return "-"
    spread = "" if high - low <= 2e-3 * abs(middle) else f" ({low:.4g} to {high:.4g})"
    return f"{middle:.5g}{spread}"


def _barycentric(found: Inspection) -> str:
    velocity = found.barycentric_velocity_km_s
    return (
        ", barycentric velocity not known"
        if velocity is None
        else f", barycentric velocity {velocity:+.3f} km/s"
    )


def _masked(found: Inspection) -> str:
    return (
        f"{100 * found.masked_fraction:.2f} % of samples, {found.dead_channels} whole channels, "
        f"{found.dead_spaxels} whole spaxels"
    )


def _errors(found: Inspection) -> str:
    check = found.errors
    parts = [check.verdict]
    if math.isfinite(check.ratio):
        parts.append(f"scatter / claimed = {check.ratio:.3g}")
    if math.isfinite(check.scatter_sigma):
        parts.append(f"scatter {check.scatter_sigma:.3g}")
    return ", ".join(parts)
