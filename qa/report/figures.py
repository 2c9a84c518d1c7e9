"""Plotly figures as plain dicts: what is drawn, and nothing of where it came from.

Colours are told apart without colour vision, and each series also has a shape or dash of its own.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from qa.reading import Curve

INK, FAINT, POINT, LINE = "#1c2328", "#c3cbd1", "#0b4f8a", "#b3541e"
LIMIT, BAND = "#6b3a7d", "rgba(179,84,30,0.14)"
SERIES = ("#0b4f8a", "#b3541e", "#3c7a3f", "#6b3a7d", "#7a6a1c", "#47565f")
SYMBOLS = ("circle", "square", "diamond", "triangle-up", "cross", "x")
DASHES = ("solid", "dash", "dot", "dashdot", "longdash", "longdashdot")
_FONT = {"family": "Georgia, 'Times New Roman', serif", "size": 12, "color": INK}

Figure = dict[str, Any]


def _layout(height: int, **more: Any) -> dict[str, Any]:
    base = {
        "height": height,
        "font": _FONT,
        "paper_bgcolor": "white",
        "plot_bgcolor": "white",
        "margin": {"l": 58, "r": 16, "t": 28, "b": 44},
        "hovermode": "closest",
        "showlegend": False,
    }
    return base | more


def _axis(title: str = "", **more: Any) -> dict[str, Any]:
    return {
        "title": {"text": title},
        "showline": True,
        "linecolor": INK,
        "gridcolor": "#e7ebee",
        "zeroline": False,
        "ticks": "outside",
        "automargin": True,
    } | more


def curves(rows: Sequence[Curve], labels: Mapping[str, str], time_name: str, columns: int = 3) -> Figure:
    """Fitted curves of one scan, one cell per vial: signal and fit above, residual over its noise below.

    Parameters
    ----------
    labels : text above each vial's cell
    time_name : "TI" or "TE"
    """
    lines = -(-len(rows) // columns)
    height = 205 * lines + 40
    data: list[dict[str, Any]] = []
    layout = _layout(height, margin={"l": 40, "r": 8, "t": 24, "b": 30}, annotations=[])
    gap_x, gap_y = 0.06, 0.2 / max(lines, 1)
    width, tall = (1 - gap_x * (columns - 1)) / columns, (1 - gap_y * (lines - 1)) / max(lines, 1)
    for number, curve in enumerate(rows):
        row, column = divmod(number, columns)
        left, top = column * (width + gap_x), 1 - row * (tall + gap_y)
        a, b = 2 * number + 1, 2 * number + 2
        names = tuple("" if n == 1 else str(n) for n in (a, b))
        noise = curve.noise if curve.noise > 0 else 1.0
        data += [
            _points(curve.times_ms, curve.signal, names[0], f"vial {curve.vial}, measured"),
            _points(curve.times_ms, curve.fitted, names[0], f"vial {curve.vial}, fitted", line=True),
            _points(curve.times_ms, [r / noise for r in curve.residual], names[1], "residual over noise", small=True),
        ]
        box = [left, left + width]
        layout[f"xaxis{names[0]}"] = _axis(
            domain=box, anchor=f"y{names[0]}", showticklabels=False, matches=f"x{names[1]}"
        )
        layout[f"yaxis{names[0]}"] = _axis(
            domain=[top - tall * 0.68, top], anchor=f"x{names[0]}", nticks=4, rangemode="tozero"
        )
        layout[f"xaxis{names[1]}"] = _axis(domain=box, anchor=f"y{names[1]}", nticks=5)
        layout[f"yaxis{names[1]}"] = _axis(
            domain=[top - tall, top - tall * 0.74], anchor=f"x{names[1]}", nticks=3, zeroline=True, zerolinecolor=FAINT
        )
        layout["annotations"].append(_note(labels.get(curve.vial, curve.vial), left, top, anchor="bottom"))
    layout["annotations"].append(
        _note(f"below each: {time_name} in ms", 1.0, 0.0, anchor="top", align="right", shift=-24)
    )
    return {"data": data, "layout": layout}


def _points(
    x: Sequence[float], y: Sequence[float], axes: str, name: str, *, line: bool = False, small: bool = False
) -> Figure:
    made: Figure = {
        "type": "scatter",
        "x": list(x),
        "y": list(y),
        "xaxis": f"x{axes}",
        "yaxis": f"y{axes}",
        "name": name,
    }
    if line:
        return made | {"mode": "lines", "line": {"color": LINE, "width": 1.5}}
    return made | {
        "mode": "markers",
        "marker": {"color": POINT, "size": 4 if small else 6, "symbol": "x" if small else "circle"},
    }


def _note(text: str, x: float, y: float, *, anchor: str, shift: int = 4, align: str = "left") -> dict[str, Any]:
    return {
        "text": plain_label(text),
        "x": x,
        "y": y,
        "xref": "paper",
        "yref": "paper",
        "showarrow": False,
        "xanchor": align,
        "yanchor": anchor,
        "yshift": shift,
        "font": {"size": 12},
    }


def plain_label(text: str) -> str:
    """`text` for Plotly, which reads a few tags in labels: none of them from a file."""
    return text.replace("&", "&amp;").replace("<", "&lt;").replace(">", "&gt;")


def series(
    lines: Sequence[Mapping[str, Any]],
    y_title: str,
    *,
    limits: Sequence[tuple[float, str]] = (),
    bands: Sequence[tuple[str, str, str]] = (),
    events: Sequence[tuple[str, str]] = (),
    height: int = 300,
    legend: bool = False,
) -> Figure:
    """Values over time.

    Parameters
    ----------
    lines : each with x (ISO times), y, name, and optionally u (error bars, k = 1), dash, marker ("" for none)
    limits : heights of horizontal lines, with their names
    bands : spans of days shaded, with what they mean
    events : days of vertical lines, with what happened
    """
    data = []
    for number, one in enumerate(lines):
        color = one.get("color", SERIES[number % len(SERIES)])
        made: Figure = {"type": "scatter", "x": list(one["x"]), "y": _gaps(one["y"]), "name": plain_label(one["name"])}
        marker = one.get("marker", SYMBOLS[number % len(SYMBOLS)])
        dash = one.get("dash", "")
        made["mode"] = "+".join(part for part in ("lines" if dash else "", "markers" if marker else "") if part)
        made["line"] = {"color": color, "width": 1.4, "dash": dash or "solid"}
        if marker:
            made["marker"] = {"color": color, "size": 6, "symbol": marker}
        if one.get("u") is not None:
            made["error_y"] = {"type": "data", "array": _gaps(one["u"]), "thickness": 1, "width": 0, "color": color}
        data.append(made)
    shapes: list[dict[str, Any]] = []
    notes: list[dict[str, Any]] = []
    for value, name in limits:
        shapes.append(_line("x", 0, 1, "y", value, value, "dash"))
        notes.append(
            {
                "x": 1,
                "xref": "paper",
                "y": value,
                "yref": "y",
                "text": plain_label(name),
                "showarrow": False,
                "xanchor": "right",
                "yanchor": "bottom",
                "font": {"size": 10, "color": LIMIT},
            }
        )
    for first, last, name in bands:
        shapes.append(
            {
                "type": "rect",
                "xref": "x",
                "yref": "paper",
                "x0": first,
                "x1": last,
                "y0": 0,
                "y1": 1,
                "fillcolor": BAND,
                "line": {"width": 0},
                "layer": "below",
            }
        )
        notes.append(_event_note(first, name, 0.0, "bottom"))
    for number, (day, name) in enumerate(events):
        shapes.append(
            {
                "type": "line",
                "xref": "x",
                "yref": "paper",
                "x0": day,
                "x1": day,
                "y0": 0,
                "y1": 1,
                "line": {"color": INK, "width": 1, "dash": "dot"},
            }
        )
        notes.append(_event_note(day, name, 1.0 - 0.07 * (number % 3), "top"))
    layout = _layout(
        height, xaxis=_axis(type="date"), yaxis=_axis(y_title), shapes=shapes, annotations=notes, showlegend=legend
    )
    layout["legend"] = {"orientation": "h", "y": 1.12, "x": 0}
    return {"data": data, "layout": layout}


def _line(axis: str, x0: float, x1: float, y: str, y0: float, y1: float, dash: str) -> dict[str, Any]:
    return {
        "type": "line",
        "xref": f"{axis} domain",
        "yref": y,
        "x0": x0,
        "x1": x1,
        "y0": y0,
        "y1": y1,
        "line": {"color": LIMIT, "width": 1, "dash": dash},
    }


def _event_note(day: str, name: str, y: float, anchor: str) -> dict[str, Any]:
    short = name if len(name) <= 34 else name[:33] + "…"
    return {
        "x": day,
        "xref": "x",
        "y": y,
        "yref": "paper",
        "text": plain_label(short),
        "showarrow": False,
        "xanchor": "left",
        "yanchor": anchor,
        "font": {"size": 10},
        "bgcolor": "rgba(255,255,255,0.8)",
    }


def small_multiples(cells: Sequence[Mapping[str, Any]], y_title: str, columns: int = 3) -> Figure:
    """One small chart per vial on a common scale of time: points with error bars, limits as dashed lines.

    Parameters
    ----------
    cells : each with label, x, y, u, and limits (heights)
    """
    lines = -(-len(cells) // columns)
    layout = _layout(150 * lines + 50, margin={"l": 46, "r": 8, "t": 26, "b": 34}, annotations=[], shapes=[])
    gap_x, gap_y = 0.055, 0.22 / max(lines, 1)
    width, tall = (1 - gap_x * (columns - 1)) / columns, (1 - gap_y * (lines - 1)) / max(lines, 1)
    data = []
    for number, cell in enumerate(cells):
        row, column = divmod(number, columns)
        left, top = column * (width + gap_x), 1 - row * (tall + gap_y)
        name = "" if number == 0 else str(number + 1)
        data.append(
            {
                "type": "scatter",
                "mode": "markers",
                "x": list(cell["x"]),
                "y": _gaps(cell["y"]),
                "xaxis": f"x{name}",
                "yaxis": f"y{name}",
                "name": plain_label(str(cell["label"])),
                "marker": {"color": POINT, "size": 4},
                "error_y": {"type": "data", "array": _gaps(cell["u"]), "thickness": 1, "width": 0, "color": FAINT},
            }
        )
        last_row = number + columns >= len(cells)
        layout[f"xaxis{name}"] = _axis(
            domain=[left, left + width],
            anchor=f"y{name}",
            type="date",
            nticks=4,
            showticklabels=last_row,
            **({"matches": "x"} if number else {}),
        )
        layout[f"yaxis{name}"] = _axis(
            y_title if column == 0 else "", domain=[top - tall, top], anchor=f"x{name}", nticks=4
        )
        for value in cell["limits"]:
            layout["shapes"].append(_line(f"x{name}", 0, 1, f"y{name}", value, value, "dash"))
        layout["annotations"].append(_note(str(cell["label"]), left, top, anchor="bottom", shift=1))
    return {"data": data, "layout": layout}


def _gaps(values: Sequence[float]) -> list[float | None]:
    """Five significant digits; None where there is no number, which leaves a gap."""
    array = np.asarray(values, dtype=np.float64)
    return [float(f"{value:.5g}") if np.isfinite(value) else None for value in array]
