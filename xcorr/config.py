"""The run file (TOML): validated, frozen settings.

Every key is described in ``docs/run-file.md``. A mistake becomes one `SettingsError` that names the key,
what was found and what to do; an unknown key is answered with the nearest known one.
"""

from __future__ import annotations

import datetime
import math
import os
import tomllib
from pathlib import Path
from typing import Annotated, Any, Literal

import tomli_w
from pydantic import (
    AfterValidator,
    BaseModel,
    BeforeValidator,
    ConfigDict,
    Field,
    ValidationError,
    ValidationInfo,
    model_validator,
)
from pydantic_core import PydanticCustomError

from xcorr._config_errors import in_words, settings_error, unknown_molecule
from xcorr.errors import SettingsError
from xcorr.provenance import sha256_of_json

MAX_VELOCITIES = 100_001
MAX_SPEED_KM_S = 30_000.0


def _wrong(problem: str, do: str, got: str = "") -> PydanticCustomError:
    """A broken rule with its advice; without `got` the offending value itself is shown."""
    return PydanticCustomError("xcorr", "{problem}", {"problem": problem, "do": do, "got": got})


def _as_path(value: Any, info: ValidationInfo) -> Any:
    """A path of the run file: relative ones start from its folder."""
    if not isinstance(value, str | Path):
        return value
    if not str(value).strip():
        raise _wrong("must name a file", "give a path")
    base = (info.context or {}).get("base_dir") or Path.cwd()
    return Path(os.path.normpath(Path(base).absolute() / Path(value).expanduser()))


def _ascending_range(value: tuple[float, float]) -> tuple[float, float]:
    if not 0 < value[0] < value[1]:
        raise _wrong("must be two positive ascending wavelengths", "write [low, high] in micrometre")
    return value


def _none_or_cubic(value: int) -> int:
    if 0 < value < 4:
        raise _wrong("must be 0 (none) or at least 4 (cubic splines)", "use 0 or a number from 4 up")
    return value


def _as_text_time(value: Any) -> Any:
    """TOML knows dates; the settings keep ISO text (UTC)."""
    return value.isoformat() if isinstance(value, datetime.datetime | datetime.date) else value


def _repeated(names: tuple[str, ...]) -> str:
    return next((repr(name) for index, name in enumerate(names) if name in names[:index]), "")


FileName = Annotated[Path, BeforeValidator(_as_path)]
Number = Annotated[float, Field(allow_inf_nan=False)]
Positive = Annotated[float, Field(gt=0, allow_inf_nan=False)]
Pair = tuple[Number, Number]
Range = Annotated[Pair, AfterValidator(_ascending_range)]
Extension = Annotated[int, Field(ge=0)] | Annotated[str, Field(min_length=1)]
Bit = Annotated[int, Field(ge=0, le=63)]
Splines = Annotated[int, Field(ge=0, le=10_000), AfterValidator(_none_or_cubic)]
Name = Annotated[str, Field(min_length=1, max_length=200)]
Medium = Literal["vacuum", "air"]


class _Table(BaseModel):
    model_config = ConfigDict(frozen=True, extra="forbid", strict=True)


class Target(_Table):
    """``[target]``: what is looked for, and where."""

    name: Name = "target"
    companion_xy: Pair | None = None
    companion_offset_arcsec: Pair | None = None
    star_xy: Pair | None = None
    systemic_velocity_km_s: Number | None = None
    systemic_velocity_err_km_s: Annotated[float, Field(ge=0, allow_inf_nan=False)] | None = None
    mask_sources: tuple[tuple[Number, Number, Positive], ...] = ()

    @model_validator(mode="after")
    def _one_position(self) -> Target:
        if self.companion_xy is not None and self.companion_offset_arcsec is not None:
            raise _wrong("places the companion twice", "keep one", "companion_xy and companion_offset_arcsec")
        if self.systemic_velocity_err_km_s is not None and self.systemic_velocity_km_s is None:
            raise _wrong("systemic_velocity_err_km_s needs systemic_velocity_km_s too", "give the velocity")
        return self


class Exposure(_Table):
    """``[[exposure]]``: one file and what it does not say, or says wrongly."""

    file: FileName
    resolving_power: Positive | FileName | None = None
    barycentric_velocity_km_s: Annotated[float, Field(gt=-1000, lt=1000, allow_inf_nan=False)] | None = None
    time: Annotated[str, BeforeValidator(_as_text_time), Field(min_length=4)] | None = None
    site: (
        tuple[
            Annotated[float, Field(ge=-360, le=360)],
            Annotated[float, Field(ge=-90, le=90)],
            Annotated[float, Field(ge=-500, le=1e7)],
        ]
        | None
    ) = None
    coordinates: (
        tuple[Annotated[float, Field(ge=0, lt=360)], Annotated[float, Field(ge=-90, le=90)]] | None
    ) = None
    medium: Medium | None = None
    air_formula: Literal["ciddor1996", "fits3"] = "ciddor1996"
    wavelength_unit: Name | None = None
    spectral_axis: Annotated[int, Field(ge=1, le=4)] | None = None
    frame: Literal["observatory", "heliocentric", "barycentric"] | None = None
    wavelength_range_um: Range | None = None
    orders: Annotated[tuple[Annotated[int, Field(ge=0)], ...], Field(min_length=1)] | None = None
    science_extension: Extension | None = None
    error_extension: Extension | None = None
    error_kind: Literal["sigma", "variance", "inverse_variance"] | None = None
    quality_extension: Extension | None = None
    quality_bad_bits: tuple[Bit, ...] | None = None
    quality_good_bits: tuple[Bit, ...] | None = None
    gain_e_per_unit: Positive | None = None
    telluric_corrected: bool = False
    starlight_removed: bool = False
    companion_xy: Pair | None = None
    star_xy: Pair | None = None
    mask_wavelength_um: tuple[Range, ...] = ()

    def reading(self) -> dict[str, Any]:
        """What `xcorr.io.read_exposure` takes besides the file: all keys but the positions."""
        values: dict[str, Any] = self.model_dump(exclude={"file", "companion_xy", "star_xy"})
        return values

    @model_validator(mode="after")
    def _one_quality_rule(self) -> Exposure:
        if self.quality_bad_bits is not None and self.quality_good_bits is not None:
            raise _wrong("says twice which bits count", "keep one", "quality_bad_bits and quality_good_bits")
        return self


class Psf(_Table):
    """``[psf]``: absent values come from the star's image."""

    file: FileName | None = None
    fwhm_pixels: Positive | None = None
    star_magnitude: Number | None = None


def _as_reference(value: Any, info: ValidationInfo) -> Any:
    return value if value in ("brightest", "none") else _as_path(value, info)


class Starlight(_Table):
    """``[starlight]``: the model of what the star leaves at the companion's place."""

    reference: Annotated[Literal["brightest", "none"] | Path, BeforeValidator(_as_reference)] = "brightest"
    knots: Annotated[int, Field(ge=4, le=10_000)] = 40
    background_knots: Splines = 0
    companion_knots: Splines = 6
    modes: Annotated[int, Field(ge=0)] = 0
    star_t_eff: Positive | None = None


class Search(_Table):
    """``[search]``: which molecules, over which velocities, with which built-in atmosphere."""

    molecules: tuple[Name, ...] = ()
    velocity_km_s: tuple[Number, Number, Number] = (-1000.0, 1000.0, 5.0)
    t_eff: Positive = 1200.0
    log_g: Annotated[float, Field(ge=-2, le=8)] = 4.0

    @model_validator(mode="after")
    def _usable(self) -> Search:
        start, stop, step = self.velocity_km_s
        if step <= 0:
            raise _wrong("velocity_km_s needs a step above 0", "write [start, stop, step] in km/s")
        if start > stop:
            raise _wrong("velocity_km_s starts above its stop", "write [start, stop, step] in km/s")
        if max(abs(start), abs(stop)) > MAX_SPEED_KM_S:
            raise _wrong(f"velocity_km_s reaches beyond {MAX_SPEED_KM_S:g} km/s", "search a narrower range")
        if (stop - start) / step > MAX_VELOCITIES - 1:
            raise _wrong(f"velocity_km_s asks for more than {MAX_VELOCITIES} velocities", "use a wider step")
        if repeated := _repeated(self.molecules):
            raise _wrong("molecules lists a name twice", "list each molecule once", repeated)
        return self


class TemplateFile(_Table):
    """``[[template]]``: a user's own spectrum."""

    name: Name
    file: FileName
    medium: Medium | None = None
    air_formula: Literal["ciddor1996", "fits3"] = "ciddor1996"
    wavelength_unit: Name | None = None
    resolving_power: Positive | None = None

    def reading(self) -> dict[str, Any]:
        """What `xcorr.io.read_template` takes besides the file."""
        values: dict[str, Any] = self.model_dump(exclude={"file"})
        return values


class Run(_Table):
    """``[run]``: how the work is done; nothing here but the seed changes the answer."""

    jobs: Annotated[int, Field(ge=1, le=4096)] = 1
    seed: Annotated[int, Field(ge=0, lt=2**63)] = 1
    max_memory_gb: Positive = 8.0


class Settings(_Table):
    """The whole run file; build it with `load_settings` or `parse_settings`."""

    target: Target = Target()
    exposure: Annotated[tuple[Exposure, ...], Field(min_length=1)]
    psf: Psf = Psf()
    starlight: Starlight = Starlight()
    search: Search = Search()
    template: tuple[TemplateFile, ...] = ()
    run: Run = Run()

    @model_validator(mode="after")
    def _something_to_search(self) -> Settings:
        names = (*self.search.molecules, *(template.name for template in self.template))
        if not names:
            raise _wrong(
                "[search].molecules and [[template]] are both empty", "name a molecule", "nothing to search"
            )
        if repeated := _repeated(names):
            raise _wrong(
                "a [[template]] name is taken", "give each template its own name", f"{repeated} twice"
            )
        return self

    def velocity_grid(self) -> tuple[float, ...]:
        """The searched velocities in km/s, stop included."""
        start, stop, step = self.search.velocity_km_s
        count = math.floor((stop - start) / step + 1e-9) + 1
        return tuple(start + step * index for index in range(count))

    @property
    def names(self) -> tuple[str, ...]:
        """Names of everything searched, in run-file order: molecules, then the user's templates."""
        return (*self.search.molecules, *(template.name for template in self.template))

    @property
    def sha256(self) -> str:
        """Digest of what decides the answer: without jobs, memory and paths.

        Files count by their content, which ``inputs`` of the summary lists.
        """
        plain = self.model_dump(mode="python")
        plain["run"] = {"seed": self.run.seed}
        return sha256_of_json(_without_paths(plain))

    def with_run(self, **changes: Any) -> Settings:
        """A copy with other ``[run]`` values (the command line's), validated again."""
        changed = self.run.model_dump() | {key: value for key, value in changes.items() if value is not None}
        return self.model_copy(update={"run": _validate(Run, changed, None, ("run",))})


def _without_paths(value: Any) -> Any:
    if isinstance(value, dict):
        return {key: _without_paths(item) for key, item in value.items()}
    if isinstance(value, tuple | list):
        return [_without_paths(item) for item in value]
    return "<file>" if isinstance(value, Path) else value


def settings_sha256(settings: Settings) -> str:
    """Digest of the settings that decide the answer (see `Settings.sha256`)."""
    return settings.sha256


# ---------------------------------------------------------------- reading


def load_settings(path: str | Path) -> Settings:
    """Read a run file; relative paths in it start from its own folder.

    Parameters
    ----------
    path : str or Path
        A TOML file.

    Returns
    -------
    Settings

    Raises
    ------
    SettingsError
        Broken TOML, unknown key or molecule, wrong type or value, or a named file that does not exist.
    OSError
        The run file cannot be read.
    """
    path = Path(path)
    raw = path.read_bytes()
    try:
        text = raw.decode("utf-8")
    except UnicodeDecodeError as error:
        line = raw[: error.start].count(b"\n") + 1
        raise SettingsError(
            f"run file {path.name} is not text",
            f"byte 0x{raw[error.start]:02x} in line {line}",
            "write TOML in UTF-8",
        ) from None
    settings = parse_settings(text, base_dir=path.absolute().parent, source=path.name)
    check_files(settings)
    check_molecules(settings)
    return settings


def parse_settings(text: str, *, base_dir: str | Path | None = None, source: str = "run file") -> Settings:
    """Settings from TOML text; `base_dir` is where relative paths start (default: the working directory).

    Raises
    ------
    SettingsError
        As `load_settings`, but whether named files exist is not checked.
    """
    try:
        data = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        line_count = text.count("\n") + 1
        got = str(error).replace("at end of document", f"at end of document, line {line_count}")
        raise SettingsError(f"{source} is not valid TOML", got, "correct that line") from None
    for table in ("exposure", "template"):
        if isinstance(data.get(table), dict):
            raise SettingsError(
                f"[{table}] must be a list of tables", f"[{table}]", f"write [[{table}]] with double brackets"
            )
    settings: Settings = _validate(Settings, data, base_dir, ())
    _refuse_later_features(settings)
    return settings


def parse_exposure(values: dict[str, Any], *, base_dir: str | Path | None = None) -> Exposure:
    """One exposure table from plain values (``xcorr inspect --set key=value``)."""
    exposure: Exposure = _validate(Exposure, values, base_dir, ("exposure", 0))
    return exposure


def check_files(settings: Settings) -> None:
    """Every file the settings name exists, before any work begins.

    Raises
    ------
    SettingsError
        With the key that names the missing file.
    """
    for words, path in named_files(settings):
        if path.is_dir():
            raise SettingsError(f"{words} must name a file", f"the folder {path}", "name a file in it")
        if not path.exists():
            advice = (
                'write "brightest", "none" or a file' if words.endswith(".reference") else "check the path"
            )
            raise SettingsError(f"{words}: no such file", str(path), advice)


def check_molecules(settings: Settings) -> None:
    """Every name in ``[search].molecules`` is a built-in template.

    Raises
    ------
    SettingsError
        With the nearest known name.
    """
    from xcorr.atmosphere import BUILTIN_MOLECULES

    known = (*BUILTIN_MOLECULES, "full")
    for name in settings.search.molecules:
        if name not in known:
            raise unknown_molecule(name, known)


def named_files(settings: Settings) -> list[tuple[str, Path]]:
    """All (key in words, path) pairs of the settings, in run-file order."""
    found: list[tuple[str, Path]] = []

    def walk(value: Any, location: tuple[str | int, ...]) -> None:
        if isinstance(value, Path):
            found.append((in_words(location), value))
        elif isinstance(value, BaseModel):
            for key in type(value).model_fields:
                walk(getattr(value, key), (*location, key))
        elif isinstance(value, tuple):
            for index, item in enumerate(value):
                walk(item, (*location, index))

    walk(settings, ())
    return found


def _refuse_later_features(settings: Settings) -> None:
    """Keys that later versions use are known, but never silently ignored."""
    if settings.starlight.modes > 0:
        raise SettingsError(
            "[starlight].modes is not available in this version", str(settings.starlight.modes), "set it to 0"
        )


def _tuples(value: Any) -> Any:
    """TOML arrays as tuples: the settings are immutable and validated strictly."""
    if isinstance(value, dict):
        return {key: _tuples(item) for key, item in value.items()}
    return tuple(_tuples(item) for item in value) if isinstance(value, list) else value


def _validate(model: type[Any], data: dict[str, Any], base_dir: Any, prefix: tuple[str | int, ...]) -> Any:
    try:
        return model.model_validate(_tuples(data), context={"base_dir": base_dir})
    except ValidationError as error:
        details = error.errors(include_url=False)
        # An unknown key usually explains a missing one, so it is told first.
        details.sort(key=lambda item: item["type"] != "extra_forbidden")
        raise settings_error(model, details[0], prefix) from None


# ---------------------------------------------------------------- writing


def dump_toml(settings: Settings, *, relative_to: str | Path | None = None) -> str:
    """The settings as TOML with every default filled in; values that are absent stay absent.

    Parameters
    ----------
    settings : Settings
    relative_to : str or Path, optional
        Folder the text will be written to: file names are then given relative to it, so that the written
        run file can be run from there and holds no absolute path.
    """

    def plain(value: Any) -> Any:
        if isinstance(value, BaseModel):
            items = {key: getattr(value, key) for key in type(value).model_fields}
            return {key: plain(item) for key, item in items.items() if item is not None and item != ()}
        if isinstance(value, tuple):
            return [plain(item) for item in value]
        if isinstance(value, Path):
            return os.path.relpath(value, relative_to) if relative_to is not None else str(value)
        return value

    return tomli_w.dumps(plain(settings))
