"""Weekly carbon dioxide at Mauna Loa, 59 weeks missing, against pandas and scipy.

The series: Keeling & Whorf 2004 (CDIAC), public domain, carried inside statsmodels.
"""

from __future__ import annotations

import json
import subprocess
import sys
import warnings
from datetime import date

import numpy as np
import pandas as pd
import pytest
import xarray as xr
from open_series import (
    SPECS,
    bits,
    call,
    filtered,
    kept_taps,
    mauna_loa,
    result,
    stated_otherwise,
    write_source,
)
from scipy.signal import oaconvolve

SPEC = SPECS / "open-data-co2-trend.yaml"
RESULTS = ("yearly_mean", "trend")
BRIDGED_WEEKS = 8
SERIES = mauna_loa()


def source(folder, **how):
    return write_source(folder / "co2.zarr", SERIES, "co2", "ppm", **{"chunk": 500, **how})


@pytest.fixture(scope="module")
def product(tmp_path_factory):
    folder = tmp_path_factory.mktemp("mauna_loa")
    return filtered(SPEC, source(folder), folder / "product")


def bridged(series: pd.Series) -> pd.Series:
    """Short runs on the straight line, by pandas; longer ones as they were."""
    gone = series.isna()
    run = (gone != gone.shift()).cumsum()
    length = gone.groupby(run).transform("size")
    return series.interpolate(limit_area="inside").where(~gone | (length <= BRIDGED_WEEKS))


def test_the_series_is_the_one_that_is_known():
    gone = SERIES.isna()
    assert SERIES.size == 2284
    assert gone.sum() == 59
    assert (gone & ~gone.shift(fill_value=False)).sum() == 22
    assert round(SERIES.sum(), 1) == 756816.5
    assert (SERIES.index.diff()[1:] == pd.Timedelta("7D")).all()
    # One run is longer than what the spec bridges; it has 18 weeks.
    assert bridged(SERIES).isna().sum() == 18


def test_the_command_line_checks_forecasts_filters_and_then_has_nothing_to_do(tmp_path, capsys):
    store, product = source(tmp_path), tmp_path / "product"
    assert call("check", SPEC) == 0
    assert call("check", SPEC, store) == 0
    assert "fits the source: 2,284 samples, 1 stretch\n" in capsys.readouterr().out
    assert call("forecast", SPEC, store) == 0
    said = capsys.readouterr().out
    assert "2,284 samples of 1 channel, 1 stretch" in said
    assert "hold-back 1,007 samples (7,049 days)" in said
    assert not product.exists()
    assert call("filter", SPEC, store, product, "--workers", "1") == 0
    said = capsys.readouterr().out
    # Half a week after the last sample, 2001-12-29.
    assert "yearly_mean: 2,284 samples written, 5.254% of them missing, 1 stretch" in said
    assert "published until 2002-01-01T12:00:00" in said
    assert call("filter", SPEC, store, product, "--workers", "1") == 0
    assert capsys.readouterr().out.startswith("Nothing to do")


def test_the_yearly_mean_is_that_of_pandas(product):
    # 52 weeks around a time half a week after a sample: 25 before it, its own, 26 after it.
    wanted = bridged(SERIES).rolling(52).mean().shift(-26)
    wanted.index = wanted.index + pd.Timedelta("3.5D")
    got = result(product, "yearly_mean")
    # Stamps, values and what is missing: whole years alone, and none that touches the gap.
    pd.testing.assert_series_equal(got, wanted, check_names=False, check_freq=False, rtol=1e-11)
    assert got.isna().sum() == 25 + 26 + (18 + 51)


def test_the_trend_is_that_of_scipy_with_the_same_taps(product):
    taps = kept_taps(product, "trend")
    half = taps.size // 2
    assert taps.size == 2 * half + 1
    padded = np.pad(bridged(SERIES).to_numpy(), half, mode="reflect", reflect_type="odd")
    gone = np.isnan(padded)
    # What stands in for a missing week does not matter where no result is made from it.
    values = oaconvolve(np.where(gone, 320.0, padded), taps, mode="valid")
    values[np.convolve(gone, np.ones(taps.size), mode="valid") > 0.5] = np.nan
    got = result(product, "trend")
    assert (got.index == SERIES.index).all()
    np.testing.assert_array_equal(np.isnan(got), np.isnan(values))
    np.testing.assert_allclose(got, values, rtol=0, atol=1e-10)
    # The gap, and as far as the taps reach on both sides of it.
    assert np.isnan(values).sum() == 18 + 2 * half


@pytest.mark.parametrize(
    ("year", "mean_ppm"),
    [(1959, 315.97), (1970, 325.68), (1980, 338.68), (1995, 360.80), (2000, 369.52)],
)
@pytest.mark.parametrize("name", RESULTS)
def test_mid_year_is_the_annual_mean_that_was_published(product, name, year, mean_ppm):
    # NOAA's annual means of Mauna Loa, list of 2015 (co2_annmean_mlo; up to 1974 by Scripps),
    # with an uncertainty of 0.12 ppm each; as github.com/datasets/co2-ppm keeps it. The series
    # here is Scripps's throughout, and weekly: hence 0.25.
    values = result(product, name)
    middle = values.index.get_indexer([pd.Timestamp(year, 7, 2)], method="nearest")
    assert abs(values.iloc[middle[0]] - mean_ppm) < 0.25


def test_any_reader_of_zarr_opens_the_product_without_a_warning(product):
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        for name in RESULTS:
            opened = xr.open_zarr(product, group=name)
            assert opened[name].attrs["units"] == "ppm"
            assert opened[name].dtype == np.float64
            assert opened["time"].dtype == np.dtype("datetime64[ns]")


@pytest.mark.parametrize(
    "how",
    [
        {"chunk": 97},
        {"chunk": 2284},
        {"chunk": 17},
        {"chunk": 311, "zarr_format": 2},
        {"chunk": 100, "shards": (400,)},
    ],
    ids=lambda how: " ".join(f"{key} {value}" for key, value in how.items()),
)
def test_the_bits_do_not_depend_on_how_the_source_is_stored(product, tmp_path, how):
    other = filtered(SPEC, source(tmp_path, **how), tmp_path / "product")
    assert bits(other, RESULTS) == bits(product, RESULTS)


def test_nor_on_who_does_the_work(product, tmp_path):
    # As it is called from outside, with two worker processes, for machines.
    store, other = source(tmp_path, chunk=200), tmp_path / "product"
    code = "from pipeline_filters.cli.entry import console\nconsole()"
    arguments = ["filter", str(SPEC), str(store), str(other), "--workers", "2", "--json"]
    run = subprocess.run(
        [sys.executable, "-W", "error", "-c", code, *arguments], capture_output=True, text=True
    )
    assert (run.returncode, run.stderr) == (0, "")
    record = json.loads(run.stdout)
    assert record["memory"]["workers"] == 2
    assert record["results"]["yearly_mean"]["samples_missing"] == 25 + 26 + 18 + 51
    assert bits(other, RESULTS) == bits(product, RESULTS)


def test_without_a_word_on_missing_weeks_the_first_of_them_is_refused(tmp_path, capsys):
    old = "    missing: {bridge: 8 samples}"
    strict = stated_otherwise(SPEC, old, "    missing: refuse", tmp_path / "strict.yaml")
    store, product = source(tmp_path), tmp_path / "product"
    assert call("filter", strict, store, product, "--workers", "1") == 4
    first = SERIES.index[SERIES.isna()][0].date()
    assert first == date(1958, 5, 10)
    said = capsys.readouterr().err
    assert "co2" in said
    assert first.isoformat() in said
    assert "missing: spread" in said or "bridge" in said


def test_a_rate_that_is_not_the_series_own_is_refused(tmp_path, capsys):
    old, new = "sample_interval: 7 days", "sample_interval: 14 days"
    slower = stated_otherwise(SPEC, old, new, tmp_path / "a.yaml")
    slower = stated_otherwise(
        slower, "length: 52 samples", "length: 26 samples", tmp_path / "b.yaml"
    )
    assert call("check", slower, source(tmp_path)) == 4
    said = capsys.readouterr().err
    assert "the usual step is 604800 s" in said
    assert "the spec states 14 days" in said
