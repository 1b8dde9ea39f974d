"""The hydrographs of a run as netCDF, by the Climate and Forecast conventions (CF-1.8).

A discrete sampling geometry, chapter 9.3.3: time series as a contiguous ragged array, in the classic format that every
netCDF library reads. One series is one design flood, of one outlet and one return period, at the place of the outlet's
cell. Numbers are those of hydrographs.csv, to the last bit, in the units of the project.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from basinwright.hydrology import Columns
from basinwright.project import Project
from basinwright.tables import HYDROGRAPHS, OUTLETS

if TYPE_CHECKING:
    import pandas as pd
    from numpy.typing import NDArray

FILE = "hydrographs.nc"
MOST_OUTLETS_IN_CSV = 1000
"""In a run of more outlets the hydrographs stand in the netCDF file only: as text they would fill gigabytes."""

STORM_START = "2000-01-01 00:00:00"
"""Nominal start of every storm: a design storm has no date."""

_UDUNITS = {"ft3/s": "ft3 s-1", "m3/s": "m3 s-1", "in": "inch", "mm": "mm"}
"""How UDUNITS, in which CF writes units, spells those of the table."""
_STANDARD_NAMES = {"flow": "water_volume_transport_in_river_channel", "rain": "thickness_of_rainfall_amount"}
_SERIES = ("rain", "excess", "flow")


_ABOUT = {
    "Conventions": "CF-1.8",
    "featureType": "timeSeries",
    "source": "basinwright: unit hydrographs of ungauged basins",
    "history": "written with the tables of the run; run.json says when and from what",
    "references": "run.json and flags.csv of the same run",
    "comment": "Storms are nominal: each starts at the time that the units of time name. Rain and excess rain are "
    "of the step that ends at the time, flow is that at the time.",
}


def write_hydrographs(path: Path, tables: Mapping[str, Columns], project: Project) -> None:
    """Write the hydrographs as CF-netCDF; the same hydrographs give the same bytes.

    Parameters
    ----------
    path : Path
        The file; one that is there is replaced.
    tables : mapping of str to columns
        ``outlets`` and ``hydrographs``; these must hold at least one series.
    project : Project
        Gives units and name.
    """
    from scipy.io import netcdf_file

    system, rows, outlets = project.project.units, tables["hydrographs"], tables["outlets"]
    ids, periods = np.asarray(rows["outlet_id"], dtype=object), np.asarray(rows["return_period_yr"], dtype=np.float64)
    begins = _begins(ids, periods)
    row_of = {outlet_id: i for i, outlet_id in enumerate(outlets["outlet_id"])}
    at = [row_of[outlet_id] for outlet_id in ids[begins]]
    years = periods[begins]

    path.unlink(missing_ok=True)
    with netcdf_file(path, "w", version=2) as file:
        for key, text in {**_ABOUT, "title": f"Design flood hydrographs: {project.project.name}"}.items():
            setattr(file, key, text.encode("utf-8"))
        file.createDimension("timeseries", begins.size)
        file.createDimension("obs", ids.size)

        def add(name: str, dimensions: tuple[str, ...], values: NDArray[Any], **attributes: str) -> None:
            variable = file.createVariable(name, values.dtype, dimensions)
            variable[:] = values
            for key, text in attributes.items():
                setattr(variable, key, text.encode("utf-8"))

        def add_text(name: str, texts: Sequence[str], **attributes: str) -> None:
            letters = _letters(texts)
            file.createDimension(f"{name}_length", letters.shape[1])
            add(name, ("timeseries", f"{name}_length"), letters, _Encoding="utf-8", **attributes)

        series = ("timeseries",)
        names = [f"{outlet_id}, {period:g} years" for outlet_id, period in zip(ids[begins], years, strict=True)]
        add_text("timeseries_id", names, cf_role="timeseries_id", long_name="outlet and return period of the series")
        add_text("outlet_id", ids[begins].tolist(), long_name=OUTLETS.column("outlet_id").meaning)
        add("return_period", series, years, long_name=HYDROGRAPHS.column("return_period_yr").meaning, units="year")
        for name, stem, unit in (("lat", "latitude", "degrees_north"), ("lon", "longitude", "degrees_east")):
            degrees = np.array([float(outlets[stem][i]) for i in at], dtype=np.float64)
            about = OUTLETS.column(stem).meaning
            add(name, series, degrees, standard_name=stem, long_name=about, units=unit)
        counts = np.diff(np.append(begins, ids.size)).astype(np.int32)
        add("row_size", series, counts, long_name="number of times of the series", sample_dimension="obs")
        add("time", ("obs",), np.asarray(rows["time_h"], dtype=np.float64), standard_name="time", axis="T",
            long_name=HYDROGRAPHS.column("time_h").meaning, units=f"hours since {STORM_START}", calendar="standard",
        )  # fmt: skip
        for stem in _SERIES:
            column = HYDROGRAPHS.column(stem)
            known = {"standard_name": _STANDARD_NAMES[stem]} if stem in _STANDARD_NAMES else {}
            add(stem, ("obs",), np.asarray(rows[column.name(system)], dtype=np.float64), **known,
                long_name=column.meaning, units=_UDUNITS[column.unit_in(system)],
                coordinates="time lat lon timeseries_id outlet_id return_period",
            )  # fmt: skip


def _letters(texts: Sequence[str]) -> NDArray[Any]:
    """Return texts as a CF character array, shape (texts, letters), UTF-8 padded with nulls."""
    packed = np.array([text.encode("utf-8") for text in texts])
    return packed.view("S1").reshape(packed.size, -1)


def _begins(ids: NDArray[Any], periods: NDArray[np.float64]) -> NDArray[np.int64]:
    """Return the first row of each series: the rows of one stand together."""
    starts = np.ones(ids.size, dtype=bool)
    starts[1:] = (ids[1:] != ids[:-1]) | (periods[1:] != periods[:-1])
    return np.flatnonzero(starts)


def read_hydrographs(path: Path) -> pd.DataFrame:
    """Read the netCDF file back as the rows of hydrographs.csv, columns by stem.

    Parameters
    ----------
    path : Path
        A ``hydrographs.nc`` that `write_hydrographs` wrote.

    Returns
    -------
    pandas.DataFrame
        ``outlet_id``, ``return_period_yr``, ``time_h``, ``rain``, ``excess``, ``flow``, in the units of the file.
    """
    import pandas as pd
    from scipy.io import netcdf_file

    with netcdf_file(path, "r", mmap=False) as file:
        counts = file.variables["row_size"][:]
        ids = np.array([b"".join(row).decode("utf-8") for row in file.variables["outlet_id"][:].tolist()], dtype=object)
        numbers = {"return_period_yr": np.repeat(file.variables["return_period"][:], counts)}
        numbers["time_h"] = file.variables["time"][:]
        numbers |= {stem: file.variables[stem][:] for stem in _SERIES}
        native = {name: values.astype(np.float64) for name, values in numbers.items()}  # the file is big-endian
        return pd.DataFrame({"outlet_id": np.repeat(ids, counts), **native})
