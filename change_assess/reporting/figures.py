"""Figures of a study: the maps and the sample, estimates beside mapped areas, the map × reference matrix.

The only module that knows matplotlib. Every function takes tables and arrays, writes one SVG and one PNG, and returns
where they are together with a text that says the same to those who cannot see them. The same input gives the same
files, byte for byte, on one machine. Colours are those of Okabe and Ito (2008), which colour-blind readers can tell
apart; where the colours run out, shape and label still tell.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from contextlib import AbstractContextManager
from dataclasses import dataclass
from math import ceil, floor, log10
from pathlib import Path

import matplotlib as mpl
import numpy as np
import pandas as pd
from matplotlib.axes import Axes
from matplotlib.colors import ListedColormap, PowerNorm
from matplotlib.figure import Figure as Sheet
from matplotlib.gridspec import SubplotSpec
from matplotlib.legend import Legend as Key
from matplotlib.lines import Line2D
from matplotlib.patches import Patch, Rectangle
from matplotlib.ticker import FuncFormatter, MaxNLocator
from matplotlib.transforms import offset_copy
from numpy.typing import NDArray

from change_assess.errors import InputError
from change_assess.files import replacing
from change_assess.legend import NO_CHANGE, OTHER_CHANGE, OTHER_NO_CHANGE, Legend

PALETTE = ("#D55E00", "#0072B2", "#E69F00", "#009E73", "#CC79A7", "#56B4E9", "#F0E442", "#000000")
"""Okabe and Ito (2008), strongest contrasts first."""

_GREY, _PALE, _INK = "#A8A8A8", "#E4E4E4", "#222222"
_STYLE = {
    "font.family": "DejaVu Sans", "font.size": 10.0, "axes.titlesize": 11.0, "axes.labelsize": 10.0,
    "legend.fontsize": 9.0, "legend.title_fontsize": 9.5, "axes.edgecolor": _GREY, "text.color": _INK,
    "axes.labelcolor": _INK, "xtick.color": _INK, "ytick.color": _INK, "svg.hashsalt": "change-assess",
    "svg.fonttype": "path", "figure.facecolor": "white", "savefig.facecolor": "white",
}  # fmt: skip
_MOST_PIXELS = 700  # along one side of a map panel
_MOST_STRATA = 7  # with a colour of their own
_DPI = 160


_Entries = tuple[str, Sequence[Patch | Line2D]]
"""Title and handles of one legend."""


@dataclass(frozen=True)
class Figure:
    """A figure on disk: `path` (SVG), `png` beside it, and `alt`, the same in words."""

    path: Path
    png: Path
    alt: str


def _style() -> AbstractContextManager[None]:
    return mpl.rc_context(_STYLE)  # type: ignore[arg-type]


def _save(sheet: Sheet, path: str | Path, alt: str) -> Figure:
    """Write the sheet as SVG and PNG beside `path`, whatever its suffix."""
    base = Path(path)
    base = base.with_suffix("") if base.suffix in (".svg", ".png") else base
    svg, png = base.with_name(base.name + ".svg"), base.with_name(base.name + ".png")
    with replacing(svg) as temporary:
        sheet.savefig(temporary, dpi=_DPI, metadata={"Date": None, "Creator": None})
    with replacing(png) as temporary:
        sheet.savefig(temporary, dpi=_DPI, metadata={"Software": None})
    return Figure(svg, png, alt)


def _need(table: pd.DataFrame, wanted: Sequence[str], what: str) -> None:
    for column in wanted:
        if column not in table.columns:
            raise InputError(
                f"the {what} have no column '{column}'", column=column, mend=f"Give columns {', '.join(wanted)}."
            )


# --- maps, change and sample -----------------------------------------------------------------------------------------


@dataclass(frozen=True)
class _Ground:
    """Where the rasters lie (`extent`), which part is shown (`view`), and how long a map unit is."""

    extent: tuple[float, float, float, float]
    view: tuple[float, float, float, float]
    metres: tuple[float, float]

    @property
    def aspect(self) -> float:
        """Height of a map unit over its width."""
        return self.metres[1] / self.metres[0]

    @property
    def width_m(self) -> float:
        """Width of the view on the ground."""
        return (self.view[1] - self.view[0]) * self.metres[0]

    @property
    def tallness(self) -> float:
        """Height of the view over its width, on the ground."""
        return (self.view[3] - self.view[2]) * self.metres[1] / self.width_m


def _ground(
    known: NDArray[np.bool_], extent: tuple[float, float, float, float], metres: tuple[float, float]
) -> _Ground:
    """The part of the rasters that holds classes, with a narrow margin."""
    left, right, bottom, top = extent
    rows, columns = (np.flatnonzero(known.any(axis=axis)) for axis in (1, 0))
    if not rows.size:
        return _Ground(extent, extent, metres)
    pixel = (right - left) / known.shape[1], (top - bottom) / known.shape[0]
    margin = 0.02 * (right - left)
    view = (
        left + columns[0] * pixel[0] - margin, left + (columns[-1] + 1) * pixel[0] + margin,
        top - (rows[-1] + 1) * pixel[1] - margin, top - rows[0] * pixel[1] + margin,
    )  # fmt: skip
    return _Ground(extent, view, metres)


def map_panel(
    covers: Mapping[str, NDArray[np.integer]],
    legend: Legend,
    path: str | Path,
    *,
    extent: tuple[float, float, float, float],
    changes: Mapping[str, NDArray[np.integer]] | None = None,
    change_names: Sequence[str] = (),
    points: pd.DataFrame | None = None,
    metres: tuple[float, float] = (1.0, 1.0),
) -> Figure:
    """Draw the map of each date, the change of each period, and the sample points by stratum; north is up.

    Rare change would vanish when a large raster is shrunk, so each cell of a change panel shows the rarest class
    among its pixels, and the figure says so.

    Parameters
    ----------
    covers : mapping of str to ndarray of int, shape (rows, columns)
        Date to raster codes (decimated previews will do), first row in the north; codes not in the legend stay white.
    legend : Legend
        Names and colours; classes without colour get one of the palette.
    path : path
        Where to write; the suffix is replaced by ``.svg`` and ``.png``.
    extent : tuple of float
        Left, right, bottom and top of the rasters, in map units.
    changes : mapping of str to ndarray of int, shape (rows, columns), optional
        Period to positions in `change_names`; negative = outside.
    change_names : sequence of str
        Change classes, as `change_assess.legend.ChangeClasses.table` gives them.
    points : DataFrame, optional
        Columns ``x``, ``y`` (map units) and ``stratum``.
    metres : tuple of float
        Length of one map unit along x and y, in metres (for the scale bar).

    Returns
    -------
    Figure
    """
    if not covers:
        raise InputError("there is no map to draw", mend="Give at least one raster.")
    known = np.isin(next(iter(covers.values())), legend.codes)
    ground = _ground(known, extent, metres)
    names = [
        *(f"map {d}" for d in covers),
        *(f"change {p}" for p in changes or {}),
        *(["sample"] if points is not None else []),
    ]
    columns = min(len(names), max(2, len(covers)))
    with _style():
        labels = [*legend.names, *change_names, *([] if points is None else points["stratum"].astype(str).unique())]
        sheet, axes, side = _panel_sheet(len(names), columns, ground, max(map(len, labels)))
        for axis, name in zip(axes, names, strict=True):
            axis.set_title(name[0].upper() + name[1:])
        keys: list[_Entries] = [_draw_covers(axes, covers, legend, ground)]
        if changes:
            keys.append(_draw_changes(axes[len(covers) :], changes, change_names, ground))
        if points is not None:
            _need(points, ("x", "y", "stratum"), "sample points")
            keys.append(_draw_points(axes[-1], known, points, change_names, ground))
        _stack_keys(side, keys)
        _scale_bar(axes[0], ground)
        _north(axes[0])
        if changes and max(max(c.shape) for c in changes.values()) > _MOST_PIXELS:
            note = "Change is drawn larger than it is: a dot takes the colour of the rarest class among its pixels."
            sheet.text(0.012, 0.012, note, fontsize=9, ha="left", va="bottom")
        return _save(sheet, path, _map_alt(covers, legend, changes, points))


def _panel_sheet(count: int, columns: int, ground: _Ground, letters: int) -> tuple[Sheet, list[Axes], Axes]:
    """A sheet with `count` map axes in a grid and one empty axis at the right for legends of so many `letters`."""
    side_width = 0.072 * (letters + 9) + 0.45
    rows = ceil(count / columns)
    width = 3.3
    height = float(np.clip(width * ground.tallness, 1.6, 6.0)) + 0.55
    sheet = Sheet(figsize=(columns * width + side_width + 0.2, max(rows * height + 0.35, 3.6)), layout=None)
    grid = sheet.add_gridspec(
        rows, columns + 1, width_ratios=[*([1.0] * columns), side_width / width],
        left=0.012, right=0.99, top=1 - 0.36 / sheet.get_figheight(), bottom=0.55 / sheet.get_figheight(),
        wspace=0.06, hspace=0.28,
    )  # fmt: skip
    axes = [_bare(sheet, grid[i // columns, i % columns]) for i in range(count)]
    side = _bare(sheet, grid[:, columns])
    return sheet, axes, side


def _bare(sheet: Sheet, place: SubplotSpec) -> Axes:
    axis = sheet.add_subplot(place)
    axis.set_axis_off()
    return axis


def _draw_covers(
    axes: Sequence[Axes], covers: Mapping[str, NDArray[np.integer]], legend: Legend, ground: _Ground
) -> _Entries:
    colours = _class_colours(legend)
    shades = ListedColormap(["#FFFFFF", *colours])
    for axis, cover in zip(axes, covers.values(), strict=False):
        position = np.zeros(cover.shape, dtype=np.int16)
        for place, code in enumerate(legend.codes, start=1):
            position[cover == code] = place
        _image(axis, _thinned(position), shades, ground)
    handles = [Patch(facecolor=c, edgecolor=_GREY, label=n) for c, n in zip(colours, legend.names, strict=True)]
    return "Map classes", handles


def _class_colours(legend: Legend) -> list[str]:
    free = (c for c in PALETTE * (1 + len(legend.classes)) if c)
    return [item.colour or next(free) for item in legend.classes]


def _thinned(raster: NDArray[np.integer]) -> NDArray[np.integer]:
    """Every k-th pixel, so that no side is longer than a panel can show."""
    step = max(1, ceil(max(raster.shape) / _MOST_PIXELS))
    return raster[step // 2 :: step, step // 2 :: step]


def _image(axis: Axes, positions: NDArray[np.integer], shades: ListedColormap, ground: _Ground) -> None:
    axis.imshow(
        positions, cmap=shades, vmin=-0.5, vmax=shades.N - 0.5, extent=ground.extent, origin="upper",
        interpolation="nearest", aspect=ground.aspect,
    )  # fmt: skip
    axis.set_xlim(ground.view[:2])
    axis.set_ylim(ground.view[2:])


def _draw_changes(
    axes: Sequence[Axes], changes: Mapping[str, NDArray[np.integer]], names: Sequence[str], ground: _Ground
) -> _Entries:
    colours = [_change_colours(names)[name] for name in names]
    shades = ListedColormap(["#FFFFFF", *colours])
    for axis, change in zip(axes, changes.values(), strict=False):
        _image(axis, _rarest(change, len(names)) + 1, shades, ground)
    handles = [Patch(facecolor=c, edgecolor=_GREY, label=n) for c, n in zip(colours, names, strict=True)]
    return "Mapped change", handles


def _change_colours(names: Sequence[str]) -> dict[str, str]:
    """Strong colours for the named changes, greys for the rest."""
    free = iter(PALETTE * (1 + len(names)))
    quiet = {NO_CHANGE: _PALE, OTHER_NO_CHANGE: _PALE, OTHER_CHANGE: _GREY}
    return {name: quiet.get(name) or next(free) for name in names}


def _rarest(raster: NDArray[np.integer], classes: int) -> NDArray[np.int64]:
    """Shrink to panel size; each block takes the rarest class it holds, −1 (outside) only if it holds none.

    Examples
    --------
    >>> _rarest(np.array([[0, 0, -1], [0, 1, -1]]), 2).tolist()
    [[0, 0, -1], [0, 1, -1]]
    """
    inside = raster[raster >= 0]
    order = np.argsort(-np.bincount(inside.ravel(), minlength=classes), kind="stable")
    rank = np.empty(classes + 1, dtype=np.int16)
    rank[order] = np.arange(1, classes + 1)
    rank[classes] = 0
    ranks = rank[np.where(raster < 0, classes, raster)]
    step = max(1, ceil(max(raster.shape) / _MOST_PIXELS))
    padded = np.pad(ranks, [(0, -n % step) for n in ranks.shape])
    rows, columns = (n // step for n in padded.shape)
    highest = padded.reshape(rows, step, columns, step).max(axis=(1, 3))
    return np.asarray(np.concatenate(([-1], order))[highest], dtype=np.int64)


def _draw_points(
    axis: Axes, known: NDArray[np.bool_], points: pd.DataFrame, change_names: Sequence[str], ground: _Ground
) -> _Entries:
    _image(axis, _thinned(known.astype(np.int16)), ListedColormap(["#FFFFFF", _PALE]), ground)
    strata = points["stratum"].astype(str)
    sizes = strata.value_counts(sort=False)
    handles = []
    size = float(np.clip(2500 / max(len(points), 1), 1.5, 14.0))
    for name, colour, members in _stratum_colours(strata, sizes, change_names):
        chosen = points[members]
        axis.scatter(chosen["x"].astype(float), chosen["y"].astype(float), s=size, c=colour, lw=0, rasterized=True)
        label = f"{name} ({len(chosen):,})"
        handles.append(Line2D([], [], marker="o", ls="", color=colour, markersize=6, label=label))
    return "Sample units by stratum", handles


def _stratum_colours(
    strata: pd.Series, sizes: pd.Series, change_names: Sequence[str]
) -> list[tuple[str, str, pd.Series]]:
    """Name, colour and members of each stratum drawn on its own; the smaller ones share grey if they are many.

    A stratum named like a change class, or like one and its first period, has its colour.
    """
    names = [str(n) for n in sizes.index]
    many = len(names) > _MOST_STRATA + 1
    largest = [str(n) for n in sizes.sort_values(ascending=False, kind="stable").index[:_MOST_STRATA]]
    own = [n for n in names if n in largest] if many else names
    greys = {NO_CHANGE: "#5A5A5A", OTHER_NO_CHANGE: "#5A5A5A", OTHER_CHANGE: "#000000"}
    colours = _change_colours(change_names)
    fixed = {n: alike for n in own if (alike := (colours | greys).get(n) or _of_first_period(n, own, colours))}
    free = iter([c for c in PALETTE if c not in fixed.values()] * 2)
    drawn = [(n, fixed.get(n) or next(free), strata == n) for n in own]
    return [(f"{len(names) - len(own)} other strata", _GREY, ~strata.isin(own)), *drawn] if many else drawn


def _of_first_period(name: str, names: Sequence[str], colours: Mapping[str, str]) -> str:
    """Colour of a change class for the first of its strata by period ("forest loss 2016-2019"), else nothing."""
    for change, colour in colours.items():
        of_change = [n for n in names if n.startswith(f"{change} ")]
        if of_change and of_change[0] == name:
            return colour
    return ""


def _stack_keys(side: Axes, keys: Sequence[_Entries]) -> None:
    """One legend below the other in the right-hand column; smaller type where there are many entries."""
    lines = sum(len(handles) + 2.2 for _, handles in keys)
    sheet = side.get_figure(root=True)
    tall = side.get_position().height * (sheet.get_figheight() if sheet is not None else 4.0)
    size = float(np.clip(tall * 72 / lines / 1.45, 5.5, 9.0))
    top = 1.0
    for title, handles in keys:
        key = Key(
            side, list(handles), [str(h.get_label()) for h in handles], title=title, loc="upper left",
            bbox_to_anchor=(0.0, top), frameon=False, fontsize=size, title_fontsize=size + 0.5, alignment="left",
            borderaxespad=0.0, labelspacing=0.35,
        )  # fmt: skip
        side.add_artist(key)
        top -= (len(handles) + 2.2) * size * 1.45 / 72 / tall


def _scale_bar(axis: Axes, ground: _Ground) -> None:
    """A bar of round length, about a quarter of the width, below the map."""
    length = _round_length(ground.width_m / 3.5)
    share = length / ground.width_m
    below = offset_copy(axis.transAxes, axis.get_figure(root=True), y=-10, units="points")
    axis.plot([0.02, 0.02 + share], [0, 0], transform=below, color=_INK, lw=2.5, clip_on=False,
              solid_capstyle="butt", scalex=False, scaley=False)  # fmt: skip
    text = f"{length / 1000:g} km" if length >= 1000 else f"{length:g} m"
    axis.text(0.04 + share, 0, text, transform=below, va="center", ha="left", fontsize=9)


def _round_length(metres: float) -> float:
    """The largest of 1, 2 or 5 × 10ⁿ that is not longer.

    Examples
    --------
    >>> _round_length(23_400.0)
    20000.0
    """
    power = 10.0 ** floor(log10(metres))
    return float(max(step * power for step in (1, 2, 5) if step * power <= metres))


def _north(axis: Axes) -> None:
    """An arrow below the right-hand corner of the map."""
    axis.annotate(
        "N", xy=(0.97, 0.0), xytext=(0, -21), xycoords="axes fraction", textcoords="offset points", ha="center",
        va="center", fontsize=9,
        arrowprops={"arrowstyle": "-|>", "color": _INK, "lw": 1.2, "shrinkA": 0, "shrinkB": 2},
    )  # fmt: skip


def _map_alt(
    covers: Mapping[str, NDArray[np.integer]],
    legend: Legend,
    changes: Mapping[str, NDArray[np.integer]] | None,
    points: pd.DataFrame | None,
) -> str:
    parts = [f"Maps of {', '.join(covers)} with the classes {', '.join(legend.names)}"]
    parts += [f"mapped change in {', '.join(changes)}"] if changes else []
    if points is not None:
        strata = points["stratum"].astype(str).value_counts(sort=False)
        shown = ", ".join(f"{name} {count:,}" for name, count in strata.head(12).items())
        parts.append(f"{len(points):,} sample units by stratum ({shown}{', …' if len(strata) > 12 else ''})")
    return "; ".join(parts) + "."


# --- estimates beside mapped areas -----------------------------------------------------------------------------------


def estimates_against_map(rows: pd.DataFrame, path: str | Path, *, level: float = 0.95) -> Figure:
    """Draw, for each class, the estimated area with its interval, the mapped area and the true area if known.

    Every class has its own axis, so that a class of a thousand hectares can be read beside one of a million.

    Parameters
    ----------
    rows : DataFrame
        ``class, estimate, lower, upper, map_area_ha``, all in hectares, and optionally ``period`` and
        ``true_area_ha``; one row per class and period, drawn in their order. Empty limits draw no interval.
    path : path
        Where to write; the suffix is replaced by ``.svg`` and ``.png``.
    level : float
        Confidence level (0–1) of the intervals, for the legend.

    Returns
    -------
    Figure
    """
    _need(rows, ("class", "estimate", "lower", "upper", "map_area_ha"), "rows of estimates")
    if rows.empty:
        raise InputError("there are no estimates to draw", mend="Give at least one row.")
    classes = list(dict.fromkeys(rows["class"].astype(str)))
    groups = [rows[rows["class"].astype(str) == name].reset_index(drop=True) for name in classes]
    with _style():
        heights = [0.42 * len(group) + 0.38 for group in groups]
        tall = sum(heights) + 0.42 * len(groups) + 0.95
        left = min(0.075 * _longest_label(rows) + 0.25, 4.0)
        sheet = Sheet(figsize=(left + 5.8, tall))
        grid = sheet.add_gridspec(
            len(groups), 1, height_ratios=heights, left=left / (left + 5.8), right=0.955,
            top=1 - 0.62 / tall, bottom=0.62 / tall,
            hspace=0.45 * len(groups) / sum(heights) if len(groups) > 1 else 0,
        )  # fmt: skip
        axes = [sheet.add_subplot(grid[i, 0]) for i in range(len(groups))]
        for axis, name, group in zip(axes, classes, groups, strict=True):
            _draw_class(axis, name, group)
        axes[-1].set_xlabel("area (hectares)" + ("; every class has its own scale" if len(groups) > 1 else ""))
        sheet.legend(
            handles=_estimate_key(level, "true_area_ha" in rows.columns), loc="upper center",
            bbox_to_anchor=(0.5, 1.0), ncols=3, frameon=False,
        )  # fmt: skip
        return _save(sheet, path, _estimates_alt(rows))


def _longest_label(rows: pd.DataFrame) -> int:
    periods = rows["period"].fillna("").astype(str) if "period" in rows.columns else [""] * len(rows)
    return max(len(f"{name}  {period}") for name, period in zip(rows["class"].astype(str), periods, strict=True))


def _draw_class(axis: Axes, name: str, group: pd.DataFrame) -> None:
    """One class on its own axis: a line per period."""
    for line, row in group.iterrows():
        y = float(str(line))
        values = {key: _number(row.get(key)) for key in ("estimate", "lower", "upper", "map_area_ha", "true_area_ha")}
        if np.isfinite(values["lower"]) and np.isfinite(values["upper"]):
            axis.plot(
                [values["lower"], values["upper"]], [y, y], color=PALETTE[1], lw=5, alpha=0.45, solid_capstyle="butt"
            )
        if np.isfinite(values["true_area_ha"]):
            axis.plot([values["true_area_ha"]] * 2, [y - 0.33, y + 0.33], color=_INK, lw=2)
        axis.plot(values["map_area_ha"], y, "D", color=PALETTE[0], ms=7, mec="white", mew=0.8)
        axis.plot(values["estimate"], y, "o", color=PALETTE[1], ms=8, mec="white", mew=0.8)
    periods = group["period"].fillna("").astype(str) if "period" in group.columns else pd.Series([""] * len(group))
    labels = [f"{name}  {period}".strip() if i == 0 else period for i, period in enumerate(periods)]
    axis.set_yticks(range(len(group)), labels)
    axis.set_ylim(len(group) - 0.45, -0.55)
    axis.tick_params(axis="y", length=0)
    axis.set_xlim(*_span(group))
    axis.xaxis.set_major_locator(MaxNLocator(5, steps=[1, 2, 2.5, 5, 10]))
    axis.xaxis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:,.10g}"))
    axis.grid(axis="x", color=_PALE, lw=0.8)
    axis.set_axisbelow(True)
    axis.spines[["top", "right", "left"]].set_visible(False)


def _number(value: object) -> float:
    """The number in a cell; nan if it is empty."""
    return float(str(value)) if value is not None and str(value).strip() not in ("", "None", "<NA>") else float("nan")


def _span(group: pd.DataFrame) -> tuple[float, float]:
    """Limits of the axis: from zero, unless all values lie far from it."""
    keys = [k for k in ("estimate", "lower", "upper", "map_area_ha", "true_area_ha") if k in group.columns]
    values = np.array([_number(v) for k in keys for v in group[k]])
    values = values[np.isfinite(values)]
    if not values.size:
        return 0.0, 1.0
    low, high = float(values.min()), float(values.max())
    low = low if low > 0.6 * high else min(low, 0.0)
    room = 0.06 * (high - low) or 0.5 * abs(high) or 1.0
    return (low - room if low else 0.0), high + room


def _estimate_key(level: float, truth: bool) -> list[Line2D]:
    estimate = f"estimate from the sample, {level * 100:g} % interval"
    handles = [
        Line2D(
            [],
            [],
            color=(*mpl.colors.to_rgb(PALETTE[1]), 0.45),
            lw=5,
            marker="o",
            ms=8,
            mfc=PALETTE[1],
            mec="white",
            label=estimate,
        ),
        Line2D([], [], color=PALETTE[0], ls="", marker="D", ms=7, mec="white", label="counted in the map"),
    ]
    return [*handles, Line2D([], [], color=_INK, ls="", marker="|", ms=13, mew=2, label="truth")] if truth else handles


def _estimates_alt(rows: pd.DataFrame) -> str:
    parts = []
    for row in rows.to_dict("records"):
        period = str(row.get("period") or "").replace("nan", "")
        numbers = {key: _number(row.get(key)) for key in ("estimate", "lower", "upper", "map_area_ha", "true_area_ha")}
        text = f"{row['class']} {period}".strip() + f": estimate {_hectares(numbers['estimate'])}"
        if np.isfinite(numbers["lower"]) and np.isfinite(numbers["upper"]):
            text += f" ({numbers['lower']:,.0f} to {numbers['upper']:,.0f})"
        text += f", mapped {_hectares(numbers['map_area_ha'])}"
        text += f", true {_hectares(numbers['true_area_ha'])}" if np.isfinite(numbers["true_area_ha"]) else ""
        parts.append(text)
    return "Estimated and mapped areas. " + "; ".join(parts) + "."


def _hectares(value: float) -> str:
    return f"{value:,.0f} ha" if np.isfinite(value) else "not estimable"


# --- matrix ----------------------------------------------------------------------------------------------------------


def influence_bars(units: pd.DataFrame, strata: pd.DataFrame, path: str | Path, *, unit: str = "hectares") -> Figure:
    """Draw how far the estimate moves without each of the most influential units, and each stratum's share of variance.

    Parameters
    ----------
    units : DataFrame
        ``unit, stratum, change_without``; the first ten are drawn.
    strata : DataFrame
        ``stratum, variance_share``; the ten largest are drawn.
    path : path
        Where to write; the suffix is replaced by ``.svg`` and ``.png``.
    unit : str
        Unit of the estimate.

    Returns
    -------
    Figure
    """
    _need(units, ("unit", "stratum", "change_without"), "influential units")
    _need(strata, ("stratum", "variance_share"), "strata")
    top = units.head(10).iloc[::-1]
    shares = strata.sort_values("variance_share", ascending=False, kind="stable").head(10).iloc[::-1]
    names = [f"{u} ({s})" for u, s in zip(top["unit"], top["stratum"], strict=True)]
    with _style():
        sheet = Sheet(figsize=(9.5, 0.3 * max(len(top), len(shares)) + 1.4), layout="constrained")
        left, right = sheet.subplots(1, 2)
        left.barh(names, top["change_without"], color="#0072B2", height=0.65)
        left.axvline(0, color=_INK, lw=0.8)
        left.set_xlabel(f"change of the estimate without the unit ({unit})")
        right.barh(shares["stratum"].astype(str), 100 * shares["variance_share"], color="#D55E00", height=0.65)
        right.set_xlabel("share of the variance (per cent)")
        left.set_title("Units (and their strata)")
        right.set_title("Strata")
        first, stratum = units.iloc[0], shares.iloc[-1]
        alt = (
            f"Two bar charts. Without unit {first['unit']} of stratum {first['stratum']} the estimate would change by "
            f"{first['change_without']:,.4g} {unit}, the most of all units. Stratum {stratum['stratum']} carries "
            f"{stratum['variance_share']:.0%} of the variance, the most of all strata."
        )
        return _save(sheet, path, alt)


def matrix_heat(matrix: pd.DataFrame, path: str | Path, *, title: str = "") -> Figure:
    """Draw the joint map × reference matrix; rows are the map, columns the reference.

    Parameters
    ----------
    matrix : DataFrame, shape (map classes, reference classes)
        Estimated shares of the area (0–1); they add up to 1.
    path : path
        Where to write; the suffix is replaced by ``.svg`` and ``.png``.
    title : str
        What the matrix is of, for example classes and period.

    Returns
    -------
    Figure
    """
    if matrix.empty:
        raise InputError("the matrix is empty", mend="Give at least one row and one column.")
    shares = matrix.to_numpy(dtype=float)
    rows, columns = shares.shape
    names = [str(n) for n in matrix.index], [str(n) for n in matrix.columns]
    longest = 0.08 * max(len(n) for n in names[0] + names[1])
    turned = columns > 3 or longest > 0.75
    wide = 0.8 if columns <= 12 else 0.5
    left, right, top, bottom = 0.55 + longest, 0.15 + 0.6 * longest * turned, 0.5 + 0.72 * longest * turned, 0.42
    with _style():
        width, height = left + wide * columns + right, top + 0.75 * wide * rows + bottom
        room = max(0.0, 4.4 - width)
        sheet = Sheet(figsize=(width + room, height))
        place = (left + room / 2) / (width + room), bottom / height
        axis = sheet.add_axes((*place, wide * columns / (width + room), 0.75 * wide * rows / height))
        _draw_matrix(axis, shares, names, turned=turned)
        what = f"{title}, per cent of the area." if title else "Per cent of the area."
        sheet.text(0.5, 0.1 / height, f"{what} Framed: agreement.", fontsize=9, ha="center", va="bottom")
        return _save(sheet, path, _matrix_alt(matrix))


def _draw_matrix(axis: Axes, shares: NDArray[np.float64], names: tuple[list[str], list[str]], *, turned: bool) -> None:
    high = float(np.nanmax(shares)) or 1.0
    axis.imshow(shares, cmap="Blues", norm=PowerNorm(0.35, 0.0, high), aspect="auto")
    small = 10.0 if shares.shape[1] <= 12 else 7.0
    for row, column in np.ndindex(*shares.shape):
        dark = shares[row, column] > 0.25 * high
        axis.text(column, row, _per_cent(float(shares[row, column])), ha="center", va="center", fontsize=small,
                  color="white" if dark else _INK)  # fmt: skip
        if names[0][row] == names[1][column]:
            axis.add_patch(Rectangle((column - 0.5, row - 0.5), 1, 1, fill=False, ec=_INK, lw=1.6, zorder=6))
    axis.set_xticks(range(shares.shape[1]), names[1], rotation=45 if turned else 0, ha="left" if turned else "center")
    axis.xaxis.tick_top()
    axis.xaxis.set_label_position("top")
    axis.set_yticks(range(shares.shape[0]), names[0])
    axis.tick_params(length=0)
    axis.set_xlabel("reference", fontweight="bold")
    axis.set_ylabel("map", fontweight="bold")
    axis.set_xticks(np.arange(shares.shape[1] + 1) - 0.5, minor=True)
    axis.set_yticks(np.arange(shares.shape[0] + 1) - 0.5, minor=True)
    axis.grid(which="minor", color="white", lw=1.5)
    axis.tick_params(which="minor", length=0)
    axis.spines[:].set_visible(False)


def _per_cent(share: float) -> str:
    """Share as per cent with digits enough to see rare classes.

    Examples
    --------
    >>> [_per_cent(s) for s in (0.4567, 0.0123, 0.00042, 0.0000001, 0.0)]
    ['45.7', '1.23', '0.042', '<0.001', '0']
    """
    value = 100 * share
    if not np.isfinite(value):
        return ""
    if value == 0:
        return "0"
    if value < 0.001:
        return "<0.001"
    return f"{value:.1f}" if value >= 10 else f"{value:.2f}" if value >= 0.1 else f"{value:.3f}"


def _matrix_alt(matrix: pd.DataFrame) -> str:
    shares = matrix.to_numpy(dtype=float)
    cells = [
        f"map {matrix.index[i]}, reference {matrix.columns[j]}: {_per_cent(float(shares[i, j]))} %"
        for i, j in np.ndindex(*shares.shape)
        if shares[i, j] > 0
    ]
    return "Shares of the area by map class (rows) and reference class (columns). " + "; ".join(cells) + "."
