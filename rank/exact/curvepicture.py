"""A curve as a picture, SVG or PNG."""

from __future__ import annotations

import io
from typing import TYPE_CHECKING

from capmuster.enumerate.errors import CapmusterError
from capmuster.rank.inputs.quantity import format_quantity

if TYPE_CHECKING:
    from matplotlib.axes import Axes

    from capmuster.rank.exact.curve import Curve

SUFFIXES = (".svg", ".png")
HOW_TO_GET_IT = "matplotlib is not installed; pip install matplotlib"
_EXACT, _SLOW, _FAST, _FAINT = "#1b4965", "#ca6702", "#5e8c61", "#9aa0a6"


def picture(curve: Curve, suffix: str) -> bytes:
    """Draw output resistance over frequency, and efficiency over frequency and over load.

    Parameters
    ----------
    curve
        The curve.
    suffix
        ``.svg`` or ``.png``.

    Returns
    -------
    bytes
        The file; the same curve gives the same bytes.

    Raises
    ------
    CapmusterError
        matplotlib is not installed.
    """
    try:
        import matplotlib as mpl  # noqa: PLC0415 - an optional package
        from matplotlib.backends.backend_agg import FigureCanvasAgg  # noqa: PLC0415
        from matplotlib.figure import Figure  # noqa: PLC0415
    except ImportError:
        raise CapmusterError("pictures need a plotting library", accepted=HOW_TO_GET_IT) from None
    # No date and no random names: the bytes depend on the curve alone.
    with mpl.rc_context({"svg.hashsalt": "capmuster", "svg.fonttype": "none", "font.size": 9}):
        figure = Figure(figsize=(11.0, 3.8), layout="constrained")
        FigureCanvasAgg(figure)
        left, middle, right = figure.subplots(1, 3)
        _resistance(left, curve)
        _efficiency_over_frequency(middle, curve)
        _efficiency_over_load(right, curve)
        figure.suptitle(_title(curve), fontsize=10)
        out = io.BytesIO()
        metadata = {"Date": None, "Creator": None} if suffix == ".svg" else {"Software": None}
        figure.savefig(out, format=suffix[1:], metadata=metadata, dpi=150)
    return out.getvalue()


def _title(curve: Curve) -> str:
    subject = curve.subject
    return f"{subject.title or subject.converter.code}, ratio {subject.converter.ratio}"


def _resistance(axes: Axes, curve: Curve) -> None:
    sweep = curve.over_frequency
    axes.loglog(sweep.frequency, sweep.slow, "--", color=_SLOW, linewidth=1, label="slow limit R_SSL")
    axes.loglog(sweep.frequency, sweep.fast, "--", color=_FAST, linewidth=1, label="fast limit R_FSL")
    axes.loglog(sweep.frequency, sweep.resistance, color=_EXACT, linewidth=2, label="exact R_out")
    axes.axvline(curve.corner, color=_FAINT, linewidth=1, linestyle=":")
    axes.annotate(
        f"corner {format_quantity(curve.corner, 'Hz')}",
        (curve.corner, 1.0),
        xycoords=("data", "axes fraction"),
        xytext=(3, -10),
        textcoords="offset points",
        fontsize=8,
        color="#5f6368",
    )
    low, high = float(sweep.resistance.min()), float(sweep.resistance.max())
    axes.set_ylim(low / 3.0, high * 3.0)
    axes.set_xlabel("switching frequency [Hz]")
    axes.set_ylabel("output resistance [ohm]")
    axes.legend(fontsize=8)
    axes.grid(visible=True, which="major", linewidth=0.4)


def _efficiency_over_frequency(axes: Axes, curve: Curve) -> None:
    sweep = curve.over_frequency
    axes.semilogx(sweep.frequency, 100 * sweep.efficiency, color=_EXACT, linewidth=2)
    axes.axvline(curve.subject.frequency, color=_FAINT, linewidth=1, linestyle=":")
    axes.set_xlabel("switching frequency [Hz]")
    axes.set_ylabel("efficiency without gate drive [%]")
    axes.set_title(f"at {format_quantity(curve.subject.load, 'A')}", fontsize=9)
    axes.grid(visible=True, linewidth=0.4)


def _efficiency_over_load(axes: Axes, curve: Curve) -> None:
    sweep = curve.over_load
    axes.semilogx(sweep.load, 100 * sweep.efficiency, color=_EXACT, linewidth=2)
    axes.axvline(curve.subject.load, color=_FAINT, linewidth=1, linestyle=":")
    axes.set_xlabel("load [A]")
    axes.set_title(f"at {format_quantity(curve.subject.frequency, 'Hz')}", fontsize=9)
    axes.grid(visible=True, linewidth=0.4)
