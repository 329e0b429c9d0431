"""Pictures of a field: strength in colour with equipotentials at round values, or curves along a line."""

import io
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from daraf.bem.errors import InputError
from daraf.bem.probing import Probed

from .mesh_units import METRES_PER_UNIT
from .places import Places
from .units import prefix_for

__all__ = ["round_levels", "write_picture"]

FloatArray = NDArray[np.float64]

#: Kinds of picture files.
_KINDS = (".png", ".svg", ".pdf")
#: Shares of the field values that the colours span: single points at edges must not darken all the rest.
_LOW, _HIGH = 0.5, 99.0


def round_levels(low: float, high: float, about: int = 12) -> FloatArray:
    """Round values inside a range, in steps of 1, 2 or 5 times a power of ten.

    Parameters
    ----------
    low, high : float
    about : int
        How many are wanted.

    Returns
    -------
    (k,) float

    Examples
    --------
    >>> round_levels(0.0, 1.0, 5).tolist()
    [0.2, 0.4, 0.6, 0.8]
    """
    if not high > low:
        return np.zeros(0)
    raw = (high - low) / about
    power = 10.0 ** np.floor(np.log10(raw))
    step = power * next((m for m in (1.0, 2.0, 5.0) if m * power >= raw * (1 - 1e-9)), 10.0)
    inside = np.arange(np.floor(low / step) + 1, np.ceil(high / step))
    return np.asarray(np.round(inside * step, 12 - int(np.floor(np.log10(step)))))


def write_picture(path: str | Path, places: Places, probed: Probed, *, unit: str, title: str) -> Path:
    """Draw and write a picture.

    Parameters
    ----------
    path : str or Path
        PNG, SVG or PDF by its extension.
    places : Places
        A line, or a plane.
    probed : Probed
    unit : str
        Of the axes.
    title : str

    Returns
    -------
    Path

    Raises
    ------
    InputError
        If the extension is unknown, the places make no picture, or the file cannot be written.
    """
    target = Path(path)
    if target.suffix.lower() not in _KINDS:
        raise InputError(f"{path}: pictures are written as {', '.join(_KINDS)}; name it so")
    if places.kind not in ("line", "plane"):
        raise InputError("a picture shows a line or a plane; ask for one of these with --line, --plane or --sheet")
    try:
        from matplotlib.backends.backend_agg import FigureCanvasAgg
        from matplotlib.figure import Figure
    except ImportError:
        raise InputError("pictures need matplotlib, which is not installed; run `pip install matplotlib`") from None

    figure = Figure(figsize=(7.4, 5.6), layout="constrained")
    FigureCanvasAgg(figure)
    (_curves if places.kind == "line" else _map)(figure, places, probed, unit)
    figure.axes[0].set_title(title, fontsize=10, loc="left")
    stream = io.BytesIO()
    figure.savefig(stream, format=target.suffix.lower()[1:], dpi=160)
    try:
        target.write_bytes(stream.getvalue())
    except OSError as error:
        raise InputError(f"{path}: cannot be written ({error.strerror}); choose another place") from None
    return target


def _map(figure: Any, places: Places, probed: Probed, unit: str) -> None:
    from matplotlib.patheffects import withStroke

    axes = figure.add_subplot()
    n, m = places.shape
    corner = places.points[0]
    first, second = places.points[n - 1] - corner, places.points[(m - 1) * n] - corner
    shift = corner[["xyz".index(axis) for axis in places.axes]] if places.axes else np.zeros(2)
    across = (shift[0] + np.linspace(0, np.linalg.norm(first), n)) / METRES_PER_UNIT[unit]
    up = (shift[1] + np.linspace(0, np.linalg.norm(second), m)) / METRES_PER_UNIT[unit]
    metal = (probed.inside >= 0).reshape(m, n)
    strength = np.ma.masked_array(probed.strength.reshape(m, n), metal)
    volts = probed.potential.reshape(m, n)
    exponent, prefix = prefix_for(float(np.percentile(strength.compressed(), _HIGH)) if strength.count() else 0.0)
    shown = strength * 10.0**-exponent
    limits = np.percentile(shown.compressed(), [_LOW, _HIGH]) if shown.count() else (0.0, 1.0)
    axes.set_facecolor("0.75")
    picture = axes.pcolormesh(across, up, shown, cmap="cividis", vmin=limits[0], vmax=limits[1], shading="gouraud")
    figure.colorbar(picture, ax=axes, label=f"field, {prefix}V/m", extend="both", shrink=0.85)
    levels = round_levels(float(volts.min()), float(volts.max()))
    if len(levels):
        power, sign = prefix_for(float(np.max(np.abs(levels))))
        drawn = axes.contour(
            across, up, np.ma.masked_array(volts, metal), levels=levels, colors="white", linewidths=0.8
        )
        drawn.set_path_effects([withStroke(linewidth=1.8, foreground="#00224e99")])
        labels = axes.clabel(drawn, fmt=lambda v: f"{v * 10.0**-power:.4g} {sign}V", fontsize=7)
        for label in labels:
            label.set_path_effects([withStroke(linewidth=1.5, foreground="#00224e")])
    if metal.any():
        axes.contourf(across, up, metal.astype(float), levels=[0.5, 1.5], colors="0.75")
        axes.contour(across, up, metal.astype(float), levels=[0.5], colors="black", linewidths=0.8)
    names = places.axes or ("along the first side", "along the second side")
    axes.set(xlabel=f"{names[0]}, {unit}", ylabel=f"{names[1]}, {unit}", aspect="equal")


def _curves(figure: Any, places: Places, probed: Probed, unit: str) -> None:
    along = np.linalg.norm(places.points - places.points[0], axis=1) / METRES_PER_UNIT[unit]
    rows: Sequence[tuple[str, str, FloatArray, FloatArray]] = (
        ("potential", "V", probed.potential, probed.potential_uncertainty),
        ("field", "V/m", probed.strength, probed.field_uncertainty),
    )
    upper, lower = figure.subplots(2, 1, sharex=True)
    for axes, (word, symbol, value, spread) in zip((upper, lower), rows, strict=True):
        exponent, prefix = prefix_for(float(np.max(np.abs(value))))
        scale = 10.0**-exponent
        axes.fill_between(along, (value - spread) * scale, (value + spread) * scale, color="#9db4d0", linewidth=0)
        axes.plot(along, value * scale, color="#1d3557", linewidth=1.4)
        axes.set_ylabel(f"{word}, {prefix}{symbol}")
        axes.grid(color="0.9", linewidth=0.6)
    lower.set_xlabel(f"distance, {unit} (bands: expanded uncertainty, k = 2)")
