"""Real series that packages carry, as Zarr stores, and the command line over them."""

from __future__ import annotations

import warnings
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import xarray as xr
import zarr
from statsmodels.datasets import co2 as co2_data

from pipeline_filters.cli.entry import main

with warnings.catch_warnings():
    # bokeh-sampledata 2026.1 renames a column in place, which pandas 3.1 warns of.
    warnings.filterwarnings("ignore", "The inplace keyword in DataFrame", DeprecationWarning)
    from bokeh_sampledata.sea_surface_temperature import sea_surface_temperature

SPECS = Path(__file__).parents[2] / "example_specs"


def mauna_loa() -> pd.Series:
    """Weekly carbon dioxide in ppm, 1958 to 2001; NaN where nothing was measured.

    Keeling, C.D. and T.P. Whorf, 2004, Carbon Dioxide Information Analysis Center; public
    domain; as statsmodels carries it.
    """
    series = co2_data.load_pandas().data["co2"]
    return series.set_axis(series.index.as_unit("ns"))


def buoy() -> pd.Series:
    """Sea surface temperature in degrees Celsius every 30 minutes, February 2016 to March 2017.

    NERACOOS station B01, Western Maine Shelf (dataset B01_sbe37_all); free to use and
    redistribute; as bokeh-sampledata carries it. Stamps are UTC.
    """
    series = sea_surface_temperature["temperature"].tz_localize(None)
    return series.set_axis(series.index.as_unit("ns"))


def write_source(
    path: Path,
    series: pd.Series,
    name: str,
    unit: str,
    *,
    chunk: int,
    zarr_format: int = 3,
    **encoding: Any,
) -> Path:
    """A store as xarray writes it."""
    variable = xr.Variable(("time",), series.to_numpy(), {"units": unit})
    dataset = xr.Dataset({name: variable}, {"time": series.index.to_numpy()})
    dataset.to_zarr(
        path,
        zarr_format=zarr_format,
        consolidated=False,
        encoding={name: {"chunks": (chunk,), **encoding}, "time": {"chunks": (chunk,)}},
    )
    return path


def call(*arguments: str | Path) -> int:
    """One command, as the console would run it."""
    return main([str(argument) for argument in arguments])


def filtered(spec: Path, source: Path, product: Path) -> Path:
    """Runs ``filter`` in this process alone."""
    assert call("filter", spec, source, product, "--workers", "1") == 0
    return product


def result(product: Path, name: str) -> pd.Series:
    """One result by its stamps, as any reader of Zarr sees it."""
    opened = xr.open_zarr(product, group=name)
    return pd.Series(opened[name].to_numpy(), opened["time"].to_numpy(), name=name)


def kept_taps(product: Path, name: str) -> np.ndarray:
    """The taps that the product says its result was made with."""
    return np.asarray(zarr.open_array(str(product / "coefficients" / name / "0_taps"), mode="r"))


def bits(product: Path, names: tuple[str, ...]) -> dict[str, bytes]:
    """All samples and stamps of results, as bytes."""
    both = {name: result(product, name) for name in names}
    return {
        name: one.to_numpy().tobytes() + one.index.to_numpy().tobytes()
        for name, one in both.items()
    }


def stated_otherwise(spec: Path, old: str, new: str, to: Path) -> Path:
    """A spec with one line exchanged."""
    text = spec.read_text()
    assert text.count(old) == 1
    to.write_text(text.replace(old, new))
    return to
