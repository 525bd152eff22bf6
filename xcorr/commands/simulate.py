"""``xcorr simulate``: a scene with known truth, and a run file for it."""

from __future__ import annotations

import json
from pathlib import Path
from typing import TYPE_CHECKING

import click

from xcorr.commands.options import log_to_stderr, logging_options, out_option, overwrite_option

if TYPE_CHECKING:
    from xcorr.simulate import Scene

RUN_FILE = "run.toml"
TRUTH_FILE = "truth.json"


@click.command("simulate")
@out_option
@click.option("--seed", type=click.IntRange(min=0), default=1, show_default=True, help="Of the noise.")
@click.option(
    "--snr",
    type=float,
    default=15.0,
    show_default=True,
    help="S/N of the companion at the information limit.",
)
@overwrite_option
@logging_options
def command(out: Path, seed: int, snr: float, overwrite: bool, quiet: bool, debug: bool) -> None:
    """Write a scene: cubes of a star with a faint companion, the truth, and a run file.

    The companion shows CO and H2O and no CH4. The truth is never read by the search.
    """
    if not 0 <= snr <= 1e4:
        raise click.BadParameter(f"{snr} is not between 0 and 10000", param_hint="'--snr'")
    with log_to_stderr(quiet=quiet, debug=debug):
        from xcorr.io.output import output_directory
        from xcorr.simulate import demo_scene

        with output_directory(out, overwrite=overwrite) as folder:
            scene = demo_scene(seed=seed, ideal_snr=snr)
            write_scene(scene, folder)
    click.echo(f"{out / RUN_FILE}")


def write_scene(scene: Scene, folder: Path) -> None:
    """Cubes, ``truth.json`` and ``run.toml`` into an existing folder."""
    from xcorr.io import write_cube
    from xcorr.io.summary import plain

    names = [f"exposure_{index + 1}.fits" for index in range(len(scene.cubes))]
    for name, cube in zip(names, scene.cubes, strict=True):
        write_cube(folder / name, cube)
    truth = json.dumps(plain(scene.truth), indent=2, allow_nan=False) + "\n"
    (folder / TRUTH_FILE).write_text(truth, encoding="utf-8")
    (folder / RUN_FILE).write_text(run_file(scene, names), encoding="utf-8")


def run_file(scene: Scene, names: list[str]) -> str:
    """What an observer of the scene would write: where the companion is, not what it is made of."""
    text = '[target]\nname = "simulated companion"\n'
    for name, exposure in zip(names, scene.truth["exposures"], strict=True):
        x, y = exposure["companion_xy"]
        text += f'\n[[exposure]]\nfile = "{name}"\ncompanion_xy = [{x:.2f}, {y:.2f}]\n'
        text += f"resolving_power = {scene.settings.resolving_power:g}\n"
    return text + (
        f"\n[starlight]\nstar_t_eff = {scene.settings.temperature_k:g}\n"
        '\n[search]\nmolecules = ["CO", "H2O", "CH4"]\n'
        "velocity_km_s = [-1000, 1000, 5]\nt_eff = 1200\nlog_g = 4.0\n"
    )
