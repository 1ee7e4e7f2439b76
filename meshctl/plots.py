"""Figures, drawn with matplotlib and written to files.

Public: plan_figure, spectrum_figure.
"""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from meshctl.errors import WrongUsage
from meshctl.optics.features import Feature
from meshctl.plan.plan import Plan
from meshctl.plan.spectrum import Spectrum
from meshctl.session import require_suffix
from meshctl.units import db_array, nm_from_thz

if TYPE_CHECKING:  # pragma: no cover
    from matplotlib.figure import Figure

LINES_MOST = 12  # port pairs that one figure can show and still be read
FLOOR_DB = -80.0


def plan_figure(plan: Plan) -> Figure:
    """Volts of every channel with the room left up to its limit, and power of every actuator.

    Returns
    -------
    matplotlib Figure, which draws itself in a notebook
    """
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    figure = Figure(figsize=(8.0, 5.0), layout="constrained")
    FigureCanvasAgg(figure)
    above, below = figure.subplots(2, 1)
    channels, actuators = np.arange(1, len(plan.volts) + 1), np.arange(1, len(plan.power_mw) + 1)
    above.bar(channels, plan.volts, width=0.8, color="#3d6b7d", label="applied")
    room = np.where(np.isfinite(plan.headroom_v), plan.headroom_v, 0.0)
    above.bar(
        channels, room, width=0.8, bottom=plan.volts, color="none", edgecolor="#b9b9b9", label="room to the limit"
    )
    above.set(xlabel="channel, in the order of the plan", ylabel="volts (V)", title=plan.mesh_name)
    above.legend(loc="upper right", fontsize="small")
    below.bar(actuators, plan.power_mw, width=0.8, color="#a4593f")
    below.set(xlabel="actuator, in the order of the plan", ylabel="power (mW)")
    return figure


def spectrum_figure(
    spectrum: Spectrum,
    path: str | Path,
    title: str,
    feature: Feature | None = None,
    pair: tuple[str, str] | None = None,
) -> None:
    """Power and group delay over wavelength, one line for each port pair.

    Parameters
    ----------
    spectrum : Spectrum of at most LINES_MOST pairs
    path : .png, .svg or .pdf
    feature, pair : peaks or dips to mark, and the pair that they belong to

    Raises
    ------
    WrongUsage
        For another kind of file, or more pairs than can be read.
    """
    require_suffix(path, ".png", ".svg", ".pdf")
    if len(spectrum.pairs) > LINES_MOST:
        raise WrongUsage(
            f"a figure of {len(spectrum.pairs)} port pairs cannot be read; {LINES_MOST} at most",
            remedy="choose pairs with --between IN:OUT",
        )
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    figure = Figure(figsize=(8.0, 6.0), layout="constrained")
    FigureCanvasAgg(figure)
    above, below = figure.subplots(2, 1, sharex=True)
    below.ticklabel_format(axis="y", useOffset=False)
    waves = spectrum.wavelengths_nm
    power_db = np.maximum(db_array(spectrum.power), FLOOR_DB)
    marker = "o" if len(waves) < 40 else ""
    for k, (entry, leaving) in enumerate(spectrum.pairs):
        above.plot(waves, power_db[:, k], marker=marker, ms=3, label=f"{entry} to {leaving}")
        below.plot(waves, spectrum.group_delay_ps[:, k], marker=marker, ms=3)
    if feature is not None and pair is not None:
        places = nm_from_thz(np.array(feature.thz))
        level = np.maximum(db_array(np.array(feature.power)), FLOOR_DB)
        above.plot(places, level, "v" if feature.kind == "peak" else "^", color="black", label=f"{feature.kind}s")
    above.set_ylabel("power (dB)")
    below.set_ylabel("group delay (ps)")
    below.set_xlabel("wavelength (nm)")
    above.set_title(title)
    above.legend(loc="best", fontsize="small")
    for axes in (above, below):
        axes.grid(visible=True, alpha=0.3)
    figure.savefig(path, dpi=150)
