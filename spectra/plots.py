"""The bench plot: stored curves and a result in, the JSON of Bokeh figures out.

Pure: no database, no request, no clock. Bokeh is imported inside the functions, because importing it takes over a
second. Nothing here puts code into the page: what moves and links is done by `lab/plot.js` and `lab/bench.js`, which
find the models by their names (`spectrum`, `residual`, `trace`, `bands`).
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

INK = "#16213a"
INK_QUIET = "#525e76"
GRID = "#e6e8ed"
SHADE = "#eceef4"
MASKED = "#d9dde6"
ACCENT = "#0d5c88"
REFERENCE = "#b3541e"
RESIDUAL = "#6a3d8f"
FONT = "Lab Inter, DejaVu Sans, sans-serif"

FINGERPRINT_BELOW_CM1 = 1500.0
FRAME_HEIGHT_PX = 312
RESIDUAL_HEIGHT_PX = 92
LEFT_BORDER_PX = 156  # as wide as the names of the evidence lanes, which share the axis
OVERLAYS = ("reference", "residual", "baseline")
SHOWN = ("absorbance", "transmittance")
LABEL_SHARE = 0.045  # a masked region narrower than this share of the range gets no label


def bench_plot(
    *,
    curves: Mapping[str, np.ndarray],
    result: Mapping[str, Any],
    show: str = "absorbance",
    overlays: Sequence[str] = (),
) -> dict[str, Any]:
    """One spectrum with its bands, masks and overlays, ready for `Bokeh.embed.embed_item`.

    Parameters
    ----------
    curves : arrays of one shape (n,), n >= 2; ``x_cm1`` strictly increasing in cm-1, ``absorbance`` in absorbance
        units with NaN where masked; optional on the same grid ``baseline``, ``reference`` (without a baseline, scaled
        to the sample; it is drawn upon the sample's baseline) and ``residual``.
    result : the JSON of the analysis; ``bands`` and ``masked`` are read, each may be absent.
    show : "absorbance", or "transmittance" as a fraction (10 ** -absorbance; the residual stays in absorbance).
    overlays : names out of `OVERLAYS`; one that the analysis did not make is left out.

    Raises
    ------
    ValueError
        When `show` or an overlay is unknown, or the arrays do not fit together.
    """
    from bokeh.embed import json_item
    from bokeh.layouts import column
    from bokeh.models import Range1d

    if show not in SHOWN:
        raise ValueError(f"`show` is {show!r}: one of {', '.join(SHOWN)}.")
    if unknown := set(overlays) - set(OVERLAYS):
        raise ValueError(f"unknown overlay {sorted(unknown)[0]!r}: one of {', '.join(OVERLAYS)}.")
    x_cm1 = _grid(curves)
    wanted = [name for name in OVERLAYS if name in overlays and name in curves]
    columns = {"x": _float32(x_cm1), "y": _shown(curves["absorbance"], show)}
    if "baseline" in wanted:
        columns["baseline"] = _shown(curves["baseline"], show)
    if "reference" in wanted:
        columns["reference"] = _shown(curves["reference"] + curves.get("baseline", 0.0), show)

    low_cm1, high_cm1 = float(x_cm1[0]), float(x_cm1[-1])
    x_range = Range1d(
        start=high_cm1, end=low_cm1, bounds=(low_cm1, high_cm1), min_interval=4 * (high_cm1 - low_cm1) / len(x_cm1)
    )
    masked = list(result.get("masked") or ())
    figures = [
        _spectrum_figure(
            columns=columns,
            bands=_band_columns(result.get("bands") or (), x_cm1, columns["y"]),
            masked=masked,
            x_range=x_range,
            show=show,
            has_x_labels="residual" not in wanted,
        )
    ]
    if "residual" in wanted:
        figures.append(_residual_figure(columns["x"], _float32(curves["residual"]), masked=masked, x_range=x_range))
    item: dict[str, Any] = dict(json_item(column(*figures, sizing_mode="stretch_width", spacing=0)))
    return item


def band_key(position_cm1: float) -> str:
    """The text by which everything on the page that belongs to one band finds each other."""
    return f"{position_cm1:.1f}"


def _grid(curves: Mapping[str, np.ndarray]) -> np.ndarray:
    x_cm1 = np.asarray(curves["x_cm1"], dtype=np.float64)
    if x_cm1.ndim != 1 or len(x_cm1) < 2 or not np.all(np.diff(x_cm1) > 0):
        raise ValueError("`x_cm1` must be one-dimensional, strictly increasing, with at least two points.")
    for name in ("absorbance", *OVERLAYS):
        if name in curves and np.shape(curves[name]) != x_cm1.shape:
            raise ValueError(f"`{name}` has shape {np.shape(curves[name])}, `x_cm1` has {x_cm1.shape}.")
    return x_cm1


def _float32(values: np.ndarray) -> np.ndarray:
    """Half the bytes on the wire; seven digits are more than a screen shows."""
    return np.ascontiguousarray(values, dtype=np.float32)


def _shown(absorbance: np.ndarray, show: str) -> np.ndarray:
    values = np.asarray(absorbance, dtype=np.float64)
    return _float32(10.0**-values if show == "transmittance" else values)


def _span(*traces: np.ndarray) -> tuple[float, float]:
    """Lowest and highest finite value, opened when they are equal; (0, 1) when there is none."""
    finite = np.concatenate([trace[np.isfinite(trace)] for trace in traces])
    if not len(finite):
        return 0.0, 1.0
    low, high = float(finite.min()), float(finite.max())
    return (low, high) if high - low > 1e-9 else (low - 0.5, high + 0.5)


def _band_columns(bands: Sequence[Mapping[str, Any]], x_cm1: np.ndarray, shown: np.ndarray) -> dict[str, list[Any]]:
    """Bands by falling prominence, so that the most telling label gets its place first; `y` lies on the drawn trace."""
    readable = np.isfinite(shown)
    ranked = sorted(bands, key=lambda band: -float(band.get("prominence_absorbance") or 0.0)) if readable.any() else []
    positions = [float(band["position_cm1"]) for band in ranked]
    return {
        "x": positions,
        "y": [float(value) for value in np.interp(positions, x_cm1[readable], shown[readable])] if ranked else [],
        "key": [band_key(position) for position in positions],
        "height": [float(band.get("height_absorbance") or 0.0) for band in ranked],
        "width": [float(band.get("fwhm_cm1") or 0.0) for band in ranked],
        "shape": [str(band.get("shape") or "") for band in ranked],
        "intensity": [str(band.get("intensity") or "") for band in ranked],
    }


def _tip(lines: Sequence[tuple[str, str]]) -> str:
    """The hover box: one line each of (text with Bokeh's @fields, colour); no text of a person gets in here."""
    rows = "".join(f'<div style="color:{colour}">{text}</div>' for text, colour in lines)
    return f'<div style="font:12px {FONT};line-height:1.5">{rows}</div>'


def _base_figure(*, x_range: Any, y_range: Any, frame_height_px: int, y_title: str, has_x_labels: bool) -> Any:
    from bokeh.models import BoxZoomTool, PanTool, WheelZoomTool
    from bokeh.plotting import figure

    tools = [
        BoxZoomTool(name="box", dimensions="both"),
        PanTool(name="pan"),
        WheelZoomTool(name="wheel", dimensions="width", modifiers={"ctrl": True}),
    ]
    plot = figure(
        x_range=x_range,
        y_range=y_range,
        tools=tools,
        toolbar_location=None,
        frame_height=frame_height_px,
        sizing_mode="stretch_width",
        min_border_left=LEFT_BORDER_PX,
        min_border_right=18,
        min_border_top=8,
        min_border_bottom=8,
        background_fill_color=None,
        border_fill_color=None,
        outline_line_color=None,
        output_backend="canvas",
    )
    plot.toolbar.logo = None
    plot.toolbar.active_drag = tools[0]
    plot.toolbar.active_scroll = tools[2]
    plot.grid.grid_line_color = GRID
    for axis in plot.axis:
        axis.axis_label_text_font = FONT
        axis.axis_label_text_font_size = "12px"
        axis.axis_label_text_font_style = "normal"
        axis.axis_label_text_color = INK_QUIET
        axis.major_label_text_font = FONT
        axis.major_label_text_font_size = "12px"
        axis.major_label_text_color = INK_QUIET
        axis.axis_line_color = "#8b95a7"
        axis.major_tick_line_color = "#8b95a7"
        axis.minor_tick_line_color = None
    plot.yaxis.axis_label = y_title
    plot.yaxis.ticker.desired_num_ticks = 5 if frame_height_px > 150 else 2
    plot.xaxis.ticker.desired_num_ticks = 9
    if has_x_labels:
        plot.xaxis.axis_label = "wavenumber / cm⁻¹"
    else:
        plot.xaxis.major_label_text_font_size = "0px"
        plot.xaxis.major_tick_line_color = None
    return plot


def _shade_regions(plot: Any, *, masked: Sequence[Mapping[str, Any]], x_range: Any, labelled: bool) -> None:
    from bokeh.models import BoxAnnotation, Label

    low_cm1, high_cm1 = x_range.end, x_range.start
    top_px = FRAME_HEIGHT_PX - 3

    def label(text: str, x_cm1: float) -> None:
        plot.add_layout(
            Label(
                x=x_cm1,
                y=top_px,
                y_units="screen",
                text=text,
                x_offset=5,
                text_baseline="top",
                text_color=INK_QUIET,
                text_font=FONT,
                text_font_size="11.5px",
                level="annotation",
            )
        )

    if low_cm1 < FINGERPRINT_BELOW_CM1:
        edge_cm1 = min(FINGERPRINT_BELOW_CM1, high_cm1)
        plot.add_layout(
            BoxAnnotation(
                name="fingerprint",
                left=low_cm1,
                right=edge_cm1,
                fill_color=SHADE,
                fill_alpha=0.75,
                line_color=None,
                level="image",
            )
        )
        if labelled:
            label("fingerprint region", edge_cm1)
    for region in masked:
        left, right = max(float(region["low_cm1"]), low_cm1), min(float(region["high_cm1"]), high_cm1)
        if left >= right:
            continue
        plot.add_layout(
            BoxAnnotation(
                name="masked",
                left=left,
                right=right,
                fill_color=MASKED,
                fill_alpha=0.55,
                line_color=None,
                hatch_pattern="right_diagonal_line",
                hatch_color="#a9b1c0",
                hatch_alpha=0.6,
                hatch_scale=7,
                level="underlay",
            )
        )
        if labelled and right - left >= LABEL_SHARE * (high_cm1 - low_cm1):
            label("not used", right)


def _spectrum_figure(
    *,
    columns: dict[str, np.ndarray],
    bands: dict[str, list[Any]],
    masked: Sequence[Mapping[str, Any]],
    x_range: Any,
    show: str,
    has_x_labels: bool,
) -> Any:
    from bokeh.models import ColumnDataSource, HoverTool, Range1d

    # The sample sets the scale: a reference scaled past it, as over a saturated band, runs out of the frame.
    low, high = _span(columns["y"])
    others = _span(*(values for name, values in columns.items() if name != "x"))
    low, high = max(others[0], low - (high - low) / 4), min(others[1], high + (high - low) / 4)
    room = high - low
    # Room above (absorbance) or below (transmittance) the trace for the band positions.
    edges = (low - 0.04 * room, high + 0.3 * room) if show == "absorbance" else (low - 0.3 * room, high + 0.08 * room)
    y_range = Range1d(start=edges[0], end=edges[1])
    title = "absorbance" if show == "absorbance" else "transmittance (fraction)"
    plot = _base_figure(
        x_range=x_range, y_range=y_range, frame_height_px=FRAME_HEIGHT_PX, y_title=title, has_x_labels=has_x_labels
    )
    plot.name = "spectrum"
    plot.tags = [show]
    _shade_regions(plot, masked=masked, x_range=x_range, labelled=True)
    source = ColumnDataSource(data=columns, name="trace")
    styles = {
        "reference": {"line_color": REFERENCE, "line_dash": [5, 3], "line_width": 1.4},
        "baseline": {"line_color": ACCENT, "line_dash": [2, 3], "line_width": 1.2},
    }
    tips = [("@x{0.0} cm⁻¹", INK), (f"{title} @y{{0.0000}}", INK)]
    trace = plot.line("x", "y", source=source, line_color=INK, line_width=1.3, name="trace")
    for name, style in styles.items():
        if name in columns:
            plot.line("x", name, source=source, name=name, **style)
            tips.append((f"{name} @{name}{{0.0000}}", str(style["line_color"])))
    plot.scatter(
        "x",
        "y",
        source=ColumnDataSource(data=bands, name="bands"),
        size=4,
        marker="circle",
        fill_color=INK,
        line_color="#ffffff",
        line_width=1,
        name="bands",
    )
    plot.add_tools(
        HoverTool(
            renderers=[trace],
            mode="vline",
            line_policy="nearest",
            point_policy="snap_to_data",
            tooltips=_tip(tips),
            attachment="horizontal",
            show_arrow=False,
            visible=False,
        )
    )
    return plot


def _residual_figure(x: np.ndarray, residual: np.ndarray, *, masked: Sequence[Mapping[str, Any]], x_range: Any) -> Any:
    from bokeh.models import ColumnDataSource, HoverTool, Range1d, Span

    low, high = _span(residual)
    room = high - low
    plot = _base_figure(
        x_range=x_range,
        y_range=Range1d(start=low - 0.1 * room, end=high + 0.1 * room),
        frame_height_px=RESIDUAL_HEIGHT_PX,
        y_title="residual / A",
        has_x_labels=True,
    )
    plot.name = "residual"
    _shade_regions(plot, masked=masked, x_range=x_range, labelled=False)
    plot.add_layout(Span(location=0.0, dimension="width", line_color="#8b95a7", line_width=1))
    trace = plot.line(
        "x",
        "y",
        source=ColumnDataSource(data={"x": x, "y": residual}, name="residual"),
        line_color=RESIDUAL,
        line_width=1.1,
        name="residual",
    )
    plot.add_tools(
        HoverTool(
            renderers=[trace],
            mode="vline",
            tooltips=_tip([("@x{0.0} cm⁻¹", INK), ("residual @y{0.0000} A", RESIDUAL)]),
            attachment="horizontal",
            show_arrow=False,
            visible=False,
        )
    )
    return plot
