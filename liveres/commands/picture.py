"""The picture of a preset: its gain over frequency, and its poles and zeros in the z-plane.

Every kind of thing has its own line or mark besides its colour, so that the picture also reads in grey.
"""

from __future__ import annotations

from pathlib import Path

import matplotlib
import numpy as np
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.ticker import FuncFormatter, NullFormatter

from liveres.engine.settings import Filter, Preset
from liveres.files import atomic_target
from liveres.theory import response
from liveres.theory.poles import LN_1000
from liveres.units import gain_from_db

INK, NOTCH, BUS, OVER = "#1b1b1b", "#1d4e89", "#e08a2e", "#a9cbee"
# OVER is light, to be seen upon INK
_DEEPEST_DB = 90.0
# below the top of the picture: a null has no floor of its own
_LOWEST_HZ = 20.0
_PLANE_WIDE, _PLANE_HIGH = 2.8, 2.5
_STYLE = {
    "font.size": 9.5, "axes.edgecolor": "#707070", "axes.linewidth": 0.8, "axes.labelcolor": INK, "text.color": INK,
    "xtick.color": "#505050", "ytick.color": "#505050", "svg.hashsalt": "liveres", "font.family": "DejaVu Sans",
}


def draw(preset: Preset, channel: int, label: str, bus_gain: float, path: str) -> None:
    """Draw one channel of a preset into a PNG or SVG file, told by the ending of ``path``.

    label : what the channel is called in the title; bus_gain : factor on the resonators
    Raises : WriteError - the file cannot be written
    """
    filters = [one for one in preset.filters if one.enabled and (one.channels is None or channel in one.channels)]
    with matplotlib.rc_context(_STYLE):
        figure = Figure(figsize=(10.0, 9.4), layout="constrained")
        FigureCanvasAgg(figure)
        grid = figure.add_gridspec(2, 2, height_ratios=(1.0, 1.15), width_ratios=(1.0, 1.0))
        figure.suptitle(f"{preset.title or Path(path).stem}   {label}, {preset.rate_hz:g} Hz", x=0.02, ha="left", fontsize=12.5)
        _draw_gain(figure.add_subplot(grid[0, :]), preset, filters, channel, bus_gain)
        _draw_plane(figure.add_subplot(grid[1, 0]), filters, preset.rate_hz)
        _draw_distance(figure.add_subplot(grid[1, 1]), filters, preset.rate_hz)
        with atomic_target(path) as temporary:
            kind = Path(path).suffix[1:].lower()
            figure.savefig(temporary, format=kind, dpi=160, metadata={"Date": None} if kind == "svg" else None)


def _draw_gain(axes: Axes, preset: Preset, filters: list[Filter], channel: int, bus_gain: float) -> None:
    rate_hz = preset.rate_hz
    sweep = np.geomspace(_LOWEST_HZ, rate_hz / 2, 3000)
    at = np.union1d(sweep, response.telling_frequencies(filters, rate_hz, channel))
    at = at[at >= _LOWEST_HZ]
    through, dry = gain_from_db(preset.input_db), gain_from_db(preset.dry_db)
    found = response.responses(filters, rate_hz, at, channel, through, dry, bus_gain)
    levels = {name: _level(np.abs(gain)) for name, gain in zip(found._fields, found, strict=True)}
    levels["bus"] = levels["bus"] + _level(np.array([through * bus_gain])) + levels["notches"]
    top = max(6.0, levels["total"].max(), levels["bus"].max()) + 4.0
    bottom = max(top - _DEEPEST_DB, min(levels["total"].min(), levels["notches"].min(), -24.0) - 4.0)
    kinds = {one.kind for one in filters}
    label = f"ceiling for a full-scale sine, {preset.ceiling_db:g} dBFS"
    axes.axhline(preset.ceiling_db, color="#808080", linewidth=0.9, linestyle=(0, (1, 2)), label=label, zorder=1)
    shown = [("total", "whole path", {"color": INK, "linewidth": 2.2})]
    if "resonator" in kinds and dry > 0.0:
        shown.append(("bus", "resonators alone", {"color": BUS, "linewidth": 1.1, "linestyle": (0, (4, 1.5))}))
    if len(kinds) == 2:
        shown.append(("notches", "notches alone", {"color": OVER, "linewidth": 0.9}))
    for name, label, style in shown:
        axes.plot(at, np.maximum(levels[name], bottom - 9.0), label=label, **style)
    _mark_largest(axes, preset, filters, channel, bus_gain)
    axes.set_ylim(bottom, top)
    axes.set_ylabel("gain, dB")
    axes.grid(which="minor", axis="x", color="#efefef", linewidth=0.5)
    _frequency_axis(axes, rate_hz)
    _legend(axes)


def _legend(axes: Axes) -> None:
    """In one row over the frame, where it hides nothing."""
    axes.legend(
        loc="lower right", bbox_to_anchor=(1.0, 1.0), ncols=4, frameon=False, fontsize=8.5,
        borderaxespad=0.2, handletextpad=0.4, columnspacing=1.2,
    )


def _frequency_axis(axes: Axes, rate_hz: float) -> None:
    axes.set_xscale("log")
    axes.set_xlim(_LOWEST_HZ, rate_hz / 2)
    axes.set_xlabel("frequency, Hz")
    axes.xaxis.set_major_formatter(FuncFormatter(lambda hz, _: f"{hz:g}" if hz < 1000 else f"{hz / 1000:g}k"))
    axes.xaxis.set_minor_formatter(NullFormatter())
    axes.grid(which="major", color="#e2e2e2", linewidth=0.8)


def _level(gain: np.ndarray) -> np.ndarray:
    return 20.0 * np.log10(np.maximum(gain, 1e-30))


def _mark_largest(axes: Axes, preset: Preset, filters: list[Filter], channel: int, bus_gain: float) -> None:
    through, dry = gain_from_db(preset.input_db), gain_from_db(preset.dry_db)
    peak = response.steady_peak(filters, preset.rate_hz, channel, "total", dry, bus_gain)
    if peak.frequency_hz < _LOWEST_HZ:
        return
    level_db = float(_level(np.array([through * peak.gain]))[0])
    axes.plot([peak.frequency_hz], [level_db], marker="v", color=INK, markersize=6, clip_on=False)
    right = peak.frequency_hz > 0.1 * preset.rate_hz
    axes.annotate(
        f"largest: {level_db:+.2f} dB at {peak.frequency_hz:.2f} Hz", (peak.frequency_hz, level_db), (-9 if right else 9, 1),
        textcoords="offset points", ha="right" if right else "left", fontsize=8.5,
    )


def _draw_plane(axes: Axes, filters: list[Filter], rate_hz: float) -> None:
    """The whole unit circle, and the surroundings of the pole that lies nearest to it."""
    axes.set_title("z-plane", loc="left", fontsize=10)
    _circle(axes)
    axes.axhline(0.0, color="#e2e2e2", linewidth=0.8, zorder=0)
    axes.axvline(0.0, color="#e2e2e2", linewidth=0.8, zorder=0)
    _marks(axes, filters, rate_hz)
    for eighths in range(5):
        angle, text = eighths * np.pi / 4.0, f"{eighths * rate_hz / 8.0:g}{' Hz' if eighths == 1 else ''}"
        axes.text(1.17 * np.cos(angle), 1.17 * np.sin(angle), text, ha="center", va="center", fontsize=8, color="#707070")
    axes.set_xlim(-_PLANE_WIDE / 2, _PLANE_WIDE / 2)
    axes.set_ylim(-_PLANE_HIGH / 2, _PLANE_HIGH / 2)
    axes.set_aspect("equal")
    axes.set_xticks([-1, 0, 1])
    axes.set_yticks([-1, 0, 1])
    if filters:
        _draw_near(axes, filters, rate_hz)


def _draw_near(axes: Axes, filters: list[Filter], rate_hz: float) -> None:
    nearest = min(filters, key=lambda one: one.section(rate_hz).decay_rate)
    poles, zeros = response.poles_and_zeros(nearest, rate_hz)
    pole = poles[0]
    spot = pole / abs(pole)
    reach = max(1.0 - abs(pole), abs(zeros[0] - pole) if nearest.kind == "notch" else 0.0) * 2.2
    inset = axes.inset_axes((-0.58, -0.58, 1.16, 1.16), transform=axes.transData)
    inset.set_xlim(spot.real - reach, spot.real + reach)
    inset.set_ylim(spot.imag - reach, spot.imag + reach)
    _circle(inset, np.angle(spot), 8.0 * reach)
    _marks(inset, filters, rate_hz, size=8.0)
    inset.set_xticks([])
    inset.set_yticks([])
    inset.set_title(f"{nearest.name}: {_times(1.0 / reach)} nearer", fontsize=8.5, pad=3)
    inset.set_xlabel(f"R = {abs(pole):.7f}".rstrip("0"), fontsize=8, labelpad=3)
    axes.indicate_inset_zoom(inset, edgecolor="#909090", linewidth=0.8)


def _times(factor: float) -> str:
    """Two figures, and k for thousand: 840×, 13k×."""
    rounded = float(f"{factor:.2g}")
    return f"{rounded:g}×" if rounded < 1000 else f"{rounded / 1000:g}k×"


def _circle(axes: Axes, middle: float = 0.0, span: float = np.pi) -> None:
    angle = middle + np.linspace(-min(span, np.pi), min(span, np.pi), 721)
    axes.plot(np.cos(angle), np.sin(angle), color="#909090", linewidth=1.0, zorder=1)


def _marks(axes: Axes, filters: list[Filter], rate_hz: float, size: float = 6.0) -> None:
    few = len(filters) <= 200
    for kind, colour in (("notch", NOTCH), ("resonator", BUS)):
        pairs = [response.poles_and_zeros(one, rate_hz) for one in filters if one.kind == kind]
        if pairs:
            poles, zeros = (np.concatenate(each) for each in zip(*pairs, strict=True))
            edge = 1.3 if few else 0.6
            style = {"linestyle": "none", "color": colour, "markersize": size if few else size / 2, "clip_on": True}
            axes.plot(zeros.real, zeros.imag, marker="o", markerfacecolor="none", markeredgewidth=edge, zorder=2, **style)
            axes.plot(poles.real, poles.imag, marker="x", markeredgewidth=edge + 0.2, zorder=3, **style)


def _draw_distance(axes: Axes, filters: list[Filter], rate_hz: float) -> None:
    """The circle unrolled: how far inside it each pole and zero of the upper half lies."""
    axes.set_ylabel("distance inside the circle, 1 − R")
    drawn = [(one, *response.poles_and_zeros(one, rate_hz)) for one in filters]
    distances = [1.0 - abs(poles[0]) for _, poles, _ in drawn]
    least = min(distances, default=1e-3)
    edge = least / 6.0
    # zeros nearer than this are on the circle, to the eye and to the ear
    for kind, colour in (("notch", NOTCH), ("resonator", BUS)):
        chosen = [(one, poles[0], zeros[0]) for one, poles, zeros in drawn if one.kind == kind]
        if not chosen:
            continue
        at = [one.centre_hz for one, _, _ in chosen]
        style = {"linestyle": "none", "color": colour, "markersize": 6.5 if len(chosen) <= 200 else 3.0}
        axes.plot(at, [1.0 - abs(pole) for _, pole, _ in chosen], marker="x", markeredgewidth=1.5, label=f"{kind} poles", **style)
        if kind == "notch":
            inside = [max(1.0 - abs(zero), edge) for _, _, zero in chosen]
            axes.plot(at, inside, marker="o", markerfacecolor="none", clip_on=False, label="notch zeros", **style)
            for x, pole, y in zip(at, (1.0 - abs(pole) for _, pole, _ in chosen), inside, strict=True):
                axes.plot([x, x], [pole, y], color=colour, linewidth=0.7, alpha=0.6)
        else:
            # at 0 Hz and half the rate, on the circle: outside this picture and inside the z-plane's
            axes.plot([], [], marker="o", markerfacecolor="none", label="resonator zeros", **style)
    axes.set_yscale("log")
    axes.set_ylim(max([*distances, 1e-2]) * 3.0, edge)
    axes.spines["top"].set(color="#909090", linewidth=1.4)
    axes.set_box_aspect(_PLANE_HIGH / _PLANE_WIDE)
    _frequency_axis(axes, rate_hz)
    if filters:
        _legend(axes)

    def other(value: np.ndarray) -> np.ndarray:
        # 1 - R is -ln R this near the circle, so that decay and distance are each other's inverse
        return LN_1000 / (rate_hz * np.maximum(value, 1e-12))

    second = axes.secondary_yaxis("right", functions=(other, other))
    second.set_ylabel("decay of a pole there, s")
    second.yaxis.set_major_formatter(FuncFormatter(lambda seconds, _: f"{seconds:g}"))
