"""The answer as a short table: plain text for the terminal, LaTeX for a paper."""

from __future__ import annotations

import math
from statistics import NormalDist

from xcorr.results import MoleculeResult, RunResult

_DASH = "-"


def rounded(value: float, error: float) -> tuple[str, str]:
    """A value and its error to the same decimal, the error with two significant digits.

    Examples
    --------
    >>> rounded(23.456, 1.234)
    ('23.5', '1.2')
    >>> rounded(0.000123456, 0.00000987)
    ('0.0001235', '0.0000099')
    >>> rounded(1234.5, 567.0)
    ('1230', '570')
    >>> rounded(0.5, 0.0996)
    ('0.50', '0.10')
    >>> rounded(-7.0, float("nan"))
    ('-7.00', '-')
    """
    if not math.isfinite(value):
        return _DASH, _DASH
    if not math.isfinite(error) or error <= 0:
        return significant(value, 3), _DASH
    # rounding can add a digit (0.0996 -> 0.10): count decimals after it
    decimals = 1 - math.floor(math.log10(float(f"{error:.1e}")))
    places = max(decimals, 0)
    # round() also takes negative places: 1234.5 +- 567 is 1230 +- 570
    return f"{round(value, decimals):.{places}f}", f"{round(error, decimals):.{places}f}"


def significant(value: float, digits: int) -> str:
    """A number with so many significant digits, never in exponent form."""
    if not math.isfinite(value):
        return _DASH
    exponent = math.floor(math.log10(abs(value))) if value else 0
    return f"{value:.{max(digits - 1 - exponent, 0)}f}"


def sigmas(p: float) -> float:
    """One-sided normal equivalent of a probability: 1.35e-3 is 3.0.

    Examples
    --------
    >>> round(sigmas(1.34990e-3), 3)
    3.0
    """
    return -NormalDist().inv_cdf(p) if 0 < p < 1 else math.nan


def snr_text(value: float) -> str:
    """S/N to one decimal."""
    return f"{value:.1f}" if math.isfinite(value) else _DASH


def null_words(row: MoleculeResult) -> str:
    """What the nulls show, and only then what the extrapolated tail says."""
    words = []
    if row.n_null > 0:
        floor = 1.0 / (1.0 + row.n_null)
        if row.p_global_is_extrapolated:
            words.append(f"not exceeded in {row.n_null} nulls ({sigmas(floor):.1f} sigma)")
        else:
            words.append(f"{row.n_null} nulls")
    if math.isfinite(row.p_global):
        words.append(f"p {'extrapolated ' if row.p_global_is_extrapolated else ''}{row.p_global:.2g}")
    return ", ".join(words) or "no nulls"


def scaled(value: float, error: float) -> tuple[float, float, int]:
    """Value and error over a power of ten, and that power: 0 where plain decimals stay short.

    Examples
    --------
    >>> scaled(9.5e-16, 8.3e-16)
    (9.5, 8.3, -16)
    >>> scaled(0.0007, 0.0001)
    (0.0007, 0.0001, 0)
    """
    size = max(abs(value), abs(error)) if math.isfinite(error) else abs(value)
    if not math.isfinite(size) or size == 0 or 1e-5 <= size < 1e6:
        return value, error, 0
    power = math.floor(math.log10(size))
    return float(f"{value / 10.0**power:.6g}"), float(f"{error / 10.0**power:.6g}"), power


def _plus_minus(value: float, error: float) -> str:
    value, error, power = scaled(value, error)
    shown, spread = rounded(value, error)
    if spread == _DASH:
        return f"{shown}e{power}" if power else shown
    return f"({shown} +- {spread})e{power}" if power else f"{shown} +- {spread}"


def _cells(row: MoleculeResult) -> list[str]:
    return [
        row.name,
        row.verdict,
        snr_text(row.snr),
        snr_text(row.snr_conditional),
        _plus_minus(row.velocity_km_s, row.velocity_err_km_s),
        _plus_minus(row.amplitude, row.amplitude_err),
        row.amplitude_unit,
        null_words(row),
    ]


_HEADINGS = ["molecule", "verdict", "S/N", "S/N cond.", "v [km/s]", "strength", "in units of", "chance"]


def text_table(result: RunResult) -> str:
    """The result for the terminal: one row per molecule, then the warnings.

    "S/N cond." is the S/N with the other molecules fitted at the same velocity; a claim rests on it.
    """
    lines = [_HEADINGS, *(_cells(row) for row in result.molecules)]
    widths = [max(len(cell) for cell in column) for column in zip(*lines, strict=True)]
    shown = [
        "  ".join(cell.ljust(width) for cell, width in zip(line, widths, strict=True)).rstrip()
        for line in lines
    ]
    head = f"{result.target}: velocities in the {result.frame} frame"
    notes = [f"warning: {' '.join(note.message.split())}" for note in result.warnings]
    return "\n".join([head, "", *shown, *([""] if notes else []), *notes]) + "\n"


_TEX = {"\\": r"\textbackslash{}", "~": r"\textasciitilde{}", "^": r"\textasciicircum{}"} | {
    char: "\\" + char for char in "&%$#_{}"
}


def tex_escape(text: str) -> str:
    """Untrusted text for LaTeX.

    Examples
    --------
    >>> tex_escape("a_b 100%")
    'a\\\\_b 100\\\\%'
    """
    return "".join(_TEX.get(char, char if char.isprintable() else " ") for char in text)


def _tex_plus_minus(value: float, error: float) -> str:
    value, error, power = scaled(value, error)
    shown, spread = rounded(value, error)
    if shown == _DASH:
        return "--"
    times = rf" \times 10^{{{power}}}" if power else ""
    if spread == _DASH:
        return f"${shown}{times}$"
    return rf"$({shown} \pm {spread}){times}$" if power else rf"${shown} \pm {spread}$"


def _tex_probability(row: MoleculeResult) -> str:
    if not math.isfinite(row.p_global):
        return "--"
    if row.p_global <= 0:
        return "$0$"
    exponent = math.floor(math.log10(row.p_global))
    mantissa = row.p_global / 10**exponent
    number = rf"{mantissa:.1f} \times 10^{{{exponent}}}" if exponent < -2 else f"{row.p_global:.2f}"
    return f"${number}$" + ("*" if row.p_global_is_extrapolated else "")


def latex_table(result: RunResult) -> str:
    """``summary.tex``: a complete tabular, errors and values to the same decimal."""
    rows = []
    for row in result.molecules:
        cells = [
            tex_escape(row.name),
            tex_escape(row.verdict),
            f"${snr_text(row.snr)}$" if math.isfinite(row.snr) else "--",
            f"${snr_text(row.snr_conditional)}$" if math.isfinite(row.snr_conditional) else "--",
            _tex_plus_minus(row.velocity_km_s, row.velocity_err_km_s),
            _tex_plus_minus(row.amplitude, row.amplitude_err),
            tex_escape(row.amplitude_unit),
            _tex_probability(row),
        ]
        rows.append(" & ".join(cells) + r" \\")
    head = (
        r"Molecule & Verdict & S/N & S/N$_\mathrm{cond}$ & $v$ & Strength & Unit & $p_\mathrm{global}$ \\",
        r" & & & & (km\,s$^{-1}$) & & & \\",
    )
    return "\n".join(
        [
            f"% {tex_escape(result.target)}: velocities {result.frame}; * = extrapolated tail",
            r"\begin{tabular}{llrrrrlr}",
            r"\hline",
            *head,
            r"\hline",
            *rows,
            r"\hline",
            r"\end{tabular}",
            "",
        ]
    )
