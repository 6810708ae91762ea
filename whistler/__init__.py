"""L-values and equatorial electron densities from recordings of whistlers.

The public names are found when they are first asked for, so that importing the package costs
nothing:

>>> import whistler
>>> whistler.Settings().max_hops
5
"""

from __future__ import annotations

import importlib
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from whistler.catalogue import measurement_document as measurement_document
    from whistler.edit import Edit as Edit
    from whistler.edit import add_point as add_point
    from whistler.edit import drop_points as drop_points
    from whistler.edit import move_point as move_point
    from whistler.editfile import read_edits as read_edits
    from whistler.figures import plot_recording as plot_recording
    from whistler.figures import plot_spectrogram as plot_spectrogram
    from whistler.figures import plot_stroke as plot_stroke
    from whistler.measure import Measurement as Measurement
    from whistler.measure import measure_recording as measure_recording
    from whistler.pickfit import fit_picks as fit_picks
    from whistler.pickfit import refit as refit
    from whistler.picks import read_picks as read_picks
    from whistler.recording import Recording as Recording
    from whistler.recording import open_recording as open_recording
    from whistler.rows import WhistlerRow as WhistlerRow
    from whistler.saved import read_results as read_results
    from whistler.settings import Settings as Settings
    from whistler.station import Station as Station
    from whistler.station import load_station as load_station
    from whistler.trace import Trace as Trace

__version__ = "0.1.0"

__all__ = [
    "Edit",
    "Measurement",
    "Recording",
    "Settings",
    "Station",
    "Trace",
    "WhistlerRow",
    "add_point",
    "drop_points",
    "fit_picks",
    "load_station",
    "measure_recording",
    "measurement_document",
    "move_point",
    "open_recording",
    "plot_recording",
    "plot_spectrogram",
    "plot_stroke",
    "read_edits",
    "read_picks",
    "read_results",
    "refit",
]

_HOMES = {
    "Edit": "edit",
    "Measurement": "measure",
    "Recording": "recording",
    "Settings": "settings",
    "Station": "station",
    "Trace": "trace",
    "WhistlerRow": "rows",
    "add_point": "edit",
    "drop_points": "edit",
    "fit_picks": "pickfit",
    "load_station": "station",
    "measure_recording": "measure",
    "measurement_document": "catalogue",
    "move_point": "edit",
    "open_recording": "recording",
    "plot_recording": "figures",
    "plot_spectrogram": "figures",
    "plot_stroke": "figures",
    "read_edits": "editfile",
    "read_picks": "picks",
    "read_results": "saved",
    "refit": "pickfit",
}


def __getattr__(name: str) -> Any:
    """Return a public name from its module."""
    if name not in _HOMES:
        raise AttributeError(f"module 'whistler' has no attribute {name!r}")
    return getattr(importlib.import_module(f"whistler.{_HOMES[name]}"), name)


def __dir__() -> list[str]:
    """Return what there is, found or not yet."""
    return sorted({*globals(), *__all__})
