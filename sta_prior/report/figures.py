"""Figures of one solved trial as inline SVG: stable bytes, text kept as text, ids that cannot collide."""

from __future__ import annotations

import html
import io
import math
import re
import warnings
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from typing import Any

import matplotlib
import numpy as np
import xarray as xr
from matplotlib.axes import Axes
from matplotlib.backends.backend_svg import FigureCanvasSVG
from matplotlib.figure import Figure

from sta_prior.checks import BoolArray, FloatArray, IntArray

BAND = 1.6448536269514722
"""Half-width of a central 90 % interval in standard deviations."""

# Chosen to differ in lightness as well as hue, so that they survive red-green and
# blue-yellow blindness and a grey print; dashes carry the same distinction again.
ESTIMATE, RIGID, TRUTH, SHADE = "#12577f", "#c4571b", "#15181c", "#e9e2d0"
AXIS_STYLES = (("x", "#12577f", "-"), ("y", "#b3541e", (0, (5, 1.6))), ("z", "#7d6f99", (0, (1.4, 1.2))))

_STYLE: dict[Any, Any] = {
    "svg.fonttype": "none",
    "svg.hashsalt": "sta_prior",
    "text.parse_math": False,
    "font.family": "sans-serif",
    "font.sans-serif": ["DejaVu Sans"],
    "font.size": 8.5,
    "axes.titlesize": 9,
    "axes.titlelocation": "left",
    "axes.linewidth": 0.6,
    "axes.edgecolor": "#6b7178",
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.formatter.useoffset": False,
    "axes.unicode_minus": True,
    "xtick.color": "#3f454c",
    "ytick.color": "#3f454c",
    "xtick.major.width": 0.6,
    "ytick.major.width": 0.6,
    "xtick.major.size": 2.5,
    "ytick.major.size": 2.5,
    "grid.color": "#d9dde1",
    "grid.linewidth": 0.5,
    "lines.linewidth": 1.3,
    "path.simplify": True,
}
_WIDTH = 10.2  # inch; with 8.5 pt text it reads well at the width of the page


@dataclass(frozen=True)
class Drawing:
    """An inline SVG and the sentence that stands for it where it cannot be seen."""

    svg: str
    alt: str


@dataclass(frozen=True)
class TruthCurve:
    """Bone truth to draw: times (n,) s and angles (n, J, 3) rad, joints and dofs in the study's order."""

    times: FloatArray
    angles: FloatArray
    joints: tuple[str, ...]
    dofs: tuple[tuple[str, ...], ...]

    def of(self, joint: str, dof: str) -> FloatArray | None:
        """Return the truth of one degree of freedom, shape (n,), rad, or None."""
        if joint not in self.joints:
            return None
        row = self.joints.index(joint)
        return self.angles[:, row, self.dofs[row].index(dof)] if dof in self.dofs[row] else None


def thinned(count: int, most: int) -> IntArray:
    """Indices of evenly spaced frames to draw, first one included, at most ``most`` of them.

    Examples
    --------
    >>> thinned(7, 3).tolist()
    [0, 3, 6]
    """
    return np.arange(0, count, max(-(-count // most), 1), dtype=np.int64)


def runs(flags: BoolArray) -> list[tuple[int, int]]:
    """First and last index of each unbroken run of true flags, shape (n,).

    Examples
    --------
    >>> runs(np.array([True, False, True, True]))
    [(0, 0), (2, 3)]
    """
    padded = np.concatenate([[False], flags, [False]]).astype(np.int8)
    edges = np.flatnonzero(np.diff(padded))
    return [(int(first), int(last) - 1) for first, last in zip(edges[::2], edges[1::2], strict=True)]


def plain(label: object) -> str:
    """Return a label on one line, without characters that a figure cannot show."""
    text = " ".join(str(label).split())
    return "".join(letter for letter in text if letter.isprintable())


def beyond_frames(solution: xr.Dataset) -> BoolArray:
    """Frames, shape (time,), where the prior's data does not carry at least one segment."""
    if "support_class" not in solution:
        return np.zeros(solution.sizes["time"], dtype=bool)
    return np.asarray((solution["support_class"] == 2).any("segment").values, dtype=bool)


def joint_dofs(solution: xr.Dataset) -> list[tuple[str, list[str]]]:
    """Return each joint with the degrees of freedom that it has, those with any number."""
    result = []
    for joint in solution["joint"].values:
        own = solution.sel(joint=joint)
        known = np.isfinite(own["angle"].values) | np.isfinite(own["angle_rigid"].values)
        dofs = [str(dof) for dof in solution["dof"].values[known.any(axis=0)]]
        if dofs:
            result.append((str(joint), dofs))
    return result


def angle_figure(
    solution: xr.Dataset, name: str, most: int, truth: TruthCurve | None = None
) -> Drawing | None:
    """Joint angles with the 90 % band of the estimate, the rigid fit, and bone truth if given.

    Parameters
    ----------
    solution : as CONTRACT's solution
    name : makes ids inside the page unique; letters and digits
    most : largest number of frames drawn
    truth : bone truth at some frames

    Returns
    -------
    Drawing, or None where the trial has no joint.
    """
    joints = joint_dofs(solution)
    if not joints:
        return None
    times, keep = _times(solution), thinned(solution.sizes["time"], most)
    columns = max(len(dofs) for _, dofs in joints)
    words = []
    with _drawing_style():
        figure, grid = _grid(len(joints), columns, height=1.95)
        for row, (joint, dofs) in enumerate(joints):
            for column, dof in enumerate(dofs):
                axes = grid[row][column]
                own = solution.sel(joint=joint, dof=dof)
                mean, rigid = np.degrees(own["angle"].values), np.degrees(own["angle_rigid"].values)
                half = BAND * np.degrees(own["angle_sd"].values)
                measured = None if truth is None else truth.of(joint, dof)
                _shade(axes, times, beyond_frames(solution))
                axes.plot(times[keep], rigid[keep], color=RIGID, linestyle=(0, (4, 1.8)), linewidth=1.1)
                _band(axes, times[keep], mean[keep], half[keep], ESTIMATE)
                axes.plot(times[keep], mean[keep], color=ESTIMATE)
                shown = [mean, rigid]
                if truth is not None and measured is not None:
                    dots = thinned(len(truth.times), most // 4)
                    degrees = np.degrees(measured)
                    axes.plot(truth.times[dots], degrees[dots], ".", color=TRUTH, markersize=3.2)
                    shown.append(degrees)
                _limits(axes, shown, half)
                label = f"{plain(joint)} {plain(dof).replace('_', ' ')}"
                _finish(axes, f"{label} (deg)", times, row == len(joints) - 1)
                words.append(f"{label} {_words(mean, half, 'degrees')}")
            for axes in grid[row][len(dofs) :]:
                axes.set_axis_off()
        alt = "Joint angles over time: " + "; ".join(words) + "."
        return Drawing(inline_svg(figure, name, alt), alt)


def artifact_figure(solution: xr.Dataset, name: str, most: int) -> Drawing | None:
    """Estimated artifact of each marker, mm along the bone's axes, as small multiples on one scale."""
    markers = [str(marker) for marker in solution["marker"].values]
    if not markers:
        return None
    mean, spread = 1000 * solution["artifact"].values, 1000 * solution["artifact_sd"].values
    labels = [plain(marker) for marker in markers]
    return _axis_panels(solution, name, most, labels, (mean, spread), "Estimated soft-tissue artifact")


def travel_figure(solution: xr.Dataset, name: str, most: int) -> Drawing | None:
    """Travel of the distal joint centre in the proximal frame, mm, a panel for each joint that has it."""
    known = np.isfinite(solution["joint_travel"].values).any(axis=(0, 2))
    if not known.any():
        return None
    mean = 1000 * solution["joint_travel"].values[:, known]
    spread = 1000 * solution["joint_travel_sd"].values[:, known]
    labels = [plain(joint) for joint in solution["joint"].values[known]]
    return _axis_panels(solution, name, most, labels, (mean, spread), "Travel of the joint centre")


def _axis_panels(
    solution: xr.Dataset,
    name: str,
    most: int,
    labels: Sequence[str],
    values: tuple[FloatArray, FloatArray],
    what: str,
) -> Drawing:
    """Panels of x, y, z with bands; values (time, panel, 3) and their SD in mm, all panels on one scale."""
    mean, half = values[0], BAND * values[1]
    times, keep = _times(solution), thinned(solution.sizes["time"], most)
    columns = min(len(labels), 4)
    rows = -(-len(labels) // columns)
    words = []
    with _drawing_style():
        figure, grid = _grid(rows, columns, height=1.6)
        for index, label in enumerate(labels):
            axes = grid[index // columns][index % columns]
            _shade(axes, times, beyond_frames(solution))
            for axis, (_, colour, dashes) in enumerate(AXIS_STYLES):
                _band(axes, times[keep], mean[keep, index, axis], half[keep, index, axis], colour, 0.13)
                axes.plot(times[keep], mean[keep, index, axis], color=colour, linestyle=dashes)
            _limits(axes, [mean], half)
            below = index + columns >= len(labels)
            _finish(axes, f"{label} (mm)", times, below)
            words.append(f"{label} {_words(np.linalg.norm(mean[:, index], axis=-1), None, 'mm')}")
        for index in range(len(labels), rows * columns):
            grid[index // columns][index % columns].set_axis_off()
        alt = f"{what} over time, size per panel: " + "; ".join(words) + "."
        return Drawing(inline_svg(figure, name, alt), alt)


def inline_svg(figure: Figure, name: str, alt: str) -> str:
    """Render a figure as SVG to stand inside a page.

    Parameters
    ----------
    figure : drawn with this module's style
    name : prefix of every id inside, unique in the page
    alt : the sentence that a screen reader speaks

    Returns
    -------
    An ``svg`` element without prologue, comments, metadata or global style rules;
    the same figure gives the same text.
    """
    stream = io.StringIO()
    FigureCanvasSVG(figure)  # gives the figure its canvas
    figure.savefig(stream, format="svg", metadata={"Date": None, "Creator": None, "Format": None})
    text = stream.getvalue()
    text = re.sub(r"<!--.*?-->", "", text[text.index("<svg") :], flags=re.DOTALL)
    text = re.sub(r"<metadata>.*?</metadata>", "", text, flags=re.DOTALL)
    text = re.sub(r"<defs>\s*<style.*?</style>\s*</defs>", "", text, count=1, flags=re.DOTALL)
    text = re.sub(r' d="([^"]*)"', _rounded, text)
    # Groups carry ids such as axes_1 that nothing refers to; the others get the figure's name.
    text = re.sub(r'<g id="[^"]*"', "<g", text)
    text = re.sub(r' id="([^"]*)"', rf' id="{name}-\1"', text)
    text = re.sub(r'(xlink:href="#|url\(#)', rf"\1{name}-", text)
    text = re.sub(r"\s*\n\s*", "\n", text)
    head = f'<svg role="img" aria-label="{html.escape(alt, quote=True)}" '
    return text.replace("<svg ", head, 1)


def _rounded(match: re.Match[str]) -> str:
    numbers = re.sub(r"-?\d+\.\d+", lambda number: f"{float(number.group()):.4g}", match.group(1))
    return f' d="{" ".join(numbers.split())}"'


@contextmanager
def _drawing_style() -> Iterator[None]:
    with matplotlib.rc_context(_STYLE), warnings.catch_warnings():
        # Labels are the user's: a script without glyphs in the metric font still
        # shows, since the browser draws the text.
        warnings.filterwarnings("ignore", message="Glyph .* missing from", category=UserWarning)
        yield


def _grid(rows: int, columns: int, height: float) -> tuple[Figure, list[list[Axes]]]:
    figure = Figure(figsize=(_WIDTH, height * rows + 0.45))
    grid = figure.subplots(rows, columns, squeeze=False)
    total = height * rows + 0.45
    figure.subplots_adjust(
        left=0.042, right=0.995, top=1 - 0.24 / total, bottom=0.42 / total, wspace=0.19, hspace=0.38
    )
    return figure, [list(row) for row in grid]


def _times(solution: xr.Dataset) -> FloatArray:
    return np.asarray(solution["time"].values, dtype=np.float64)


def _band(
    axes: Axes, times: FloatArray, mean: FloatArray, half: FloatArray, colour: str, alpha: float = 0.2
) -> None:
    axes.fill_between(times, mean - half, mean + half, color=colour, alpha=alpha, linewidth=0)


def _shade(axes: Axes, times: FloatArray, flags: BoolArray) -> None:
    step = float(np.median(np.diff(times))) if len(times) > 1 else 1.0
    for first, last in runs(flags):
        axes.axvspan(times[first] - step / 2, times[last] + step / 2, color=SHADE, linewidth=0, zorder=0)


def _limits(axes: Axes, curves: Sequence[FloatArray], half: FloatArray) -> None:
    """Frame the curves; a band much wider than they are may leave the panel, never flatten them."""
    known = np.concatenate([curve[np.isfinite(curve)].ravel() for curve in curves])
    if not len(known):
        axes.text(0.5, 0.5, "no value", transform=axes.transAxes, ha="center", va="center", color="#6b7178")
        axes.set_yticks([])
        return
    low, high = float(known.min()), float(known.max())
    widths = half[np.isfinite(half)]
    band = float(np.quantile(widths, 0.98)) if widths.size else 0.0
    reach = min(band, max(high - low, 5.0)) + 0.04 * max(high - low, 1.0)
    axes.set_ylim(low - reach, high + reach)


def _finish(axes: Axes, title: str, times: FloatArray, label_time: bool) -> None:
    axes.set_title(title)
    axes.grid(True, axis="y")
    axes.locator_params(axis="y", nbins=5)
    axes.locator_params(axis="x", nbins=5)
    if len(times) > 1:
        axes.set_xlim(float(times[0]), float(times[-1]))
    if label_time:
        axes.set_xlabel("time (s)", labelpad=2)
    else:
        axes.tick_params(axis="x", labelbottom=False)


def _words(mean: FloatArray, half: FloatArray | None, unit: str) -> str:
    known = mean[np.isfinite(mean)]
    if not len(known):
        return "has no value"
    text = f"from {known.min():.1f} to {known.max():.1f} {unit}"
    widths = half[np.isfinite(half)] if half is not None else np.empty(0)
    if widths.size and math.isfinite(float(widths.mean())):
        text += f", 90 % band on average ±{widths.mean():.1f}"
    return text
