"""Sea surface temperature at a buoy whose clock jumps, stretch by stretch by pandas and scipy.

The series: NERACOOS station B01 (dataset B01_sbe37_all), free to use and redistribute, carried
inside bokeh-sampledata.
"""

from __future__ import annotations

import warnings
from itertools import pairwise

import numpy as np
import pandas as pd
import pytest
import xarray as xr
from open_series import (
    SPECS,
    bits,
    buoy,
    call,
    filtered,
    kept_taps,
    result,
    stated_otherwise,
    write_source,
)
from scipy.signal import butter, oaconvolve, sosfilt, sosfilt_zi
from scipy.signal.windows import hann

SPEC = SPECS / "open-data-buoy-tide.yaml"
RESULTS = ("without_tides", "tide", "as_it_comes")
STEP = pd.Timedelta("30min")
SERIES = buoy()


def source(folder, **how):
    how = {"chunk": 4000, **how}
    return write_source(folder / "b01.zarr", SERIES, "temperature", "degree_Celsius", **how)


@pytest.fixture(scope="module")
def product(tmp_path_factory):
    folder = tmp_path_factory.mktemp("buoy")
    return filtered(SPEC, source(folder), folder / "product")


def stretches(series: pd.Series) -> list[pd.Series]:
    """The series, cut wherever a step is not half an hour."""
    number = np.cumsum(series.index.diff() != STEP)
    return [part for _, part in series.groupby(number, sort=False)]


def godin(part: pd.Series) -> pd.Series:
    """Means of 24, 24 and 25 h of one stretch by pandas, in the middle of what they are made of."""
    mean = part.rolling(48).mean().rolling(48).mean().rolling(50).mean().shift(-72)
    mean.index = mean.index + STEP / 2
    return mean


def test_the_series_is_the_one_that_is_known():
    assert SERIES.size == 19226
    assert not SERIES.isna().any()
    assert (SERIES.min(), SERIES.max()) == (3.612, 22.15)
    parts = stretches(SERIES)
    ends = [(str(one.index[-1]), str(two.index[0])) for one, two in pairwise(parts)]
    assert ends == [
        ("2016-06-14 13:00:00", "2016-06-14 14:00:00"),
        ("2016-07-08 01:30:00", "2016-07-08 13:30:00"),
        ("2017-03-21 16:30:00", "2017-03-21 16:30:00"),
    ]


def test_the_command_line_tells_of_four_stretches(tmp_path, capsys):
    store, product = source(tmp_path), tmp_path / "product"
    assert call("check", SPEC, store) == 0
    assert capsys.readouterr().out.count("fits the source: 19,226 samples, 4 stretches") == 3
    assert call("forecast", SPEC, store) == 0
    assert "19,226 samples of 1 channel, 4 stretches" in capsys.readouterr().out
    assert call("filter", SPEC, store, product, "--workers", "1") == 0
    said = capsys.readouterr().out
    assert "tide: 19,226 samples written, 0.000% of them missing, 4 stretches" in said
    assert "published until 2017-03-22T00:00:00" in said


def test_godins_filter_is_three_means_of_pandas_in_each_stretch(product):
    wanted = pd.concat([godin(part) for part in stretches(SERIES)])
    got = result(product, "without_tides")
    # Stamps, values and what is missing: the last stretch is shorter than the taps.
    pd.testing.assert_series_equal(got, wanted, check_names=False, check_freq=False, rtol=1e-9)
    last = stretches(SERIES)[-1].size
    assert last < 144
    assert got.isna().sum() == 3 * 143 + last


def test_the_tide_is_that_of_scipy_with_the_same_taps_in_each_stretch(product):
    taps = kept_taps(product, "tide")
    half = taps.size // 2
    assert taps.size == 2 * half + 1
    got = result(product, "tide")
    assert (got.index == SERIES.index).all()
    begin = 0
    for part in stretches(SERIES):
        # Mirrored about the end sample; in the last stretch, which is short, more than once.
        wanted = oaconvolve(np.pad(part.to_numpy(), half, mode="reflect"), taps, mode="valid")
        np.testing.assert_allclose(
            got.iloc[begin : begin + part.size], wanted, rtol=0, atol=1e-11, err_msg=part.index[0]
        )
        begin += part.size
    assert begin == got.size


def test_what_comes_in_is_scipys_recursion_begun_anew_in_each_stretch(product):
    # From rest at the level of the stretch's first sample, as ends: hold has it.
    sections = butter(4, 0.6, fs=48, output="sos")
    wanted = [
        sosfilt(sections, part, zi=sosfilt_zi(sections) * part.iloc[0])[0]
        for part in stretches(SERIES)
    ]
    got = result(product, "as_it_comes")
    assert (got.index == SERIES.index).all()
    np.testing.assert_allclose(got, np.concatenate(wanted), rtol=0, atol=1e-9)


def daily_cycle(series: pd.Series) -> float:
    """Half the swing of a cycle of 24 h over 200 whole days; a Hann weight keeps the year out."""
    part = series["2016-08-01":"2017-02-16"].to_numpy()
    assert part.size == 200 * 48
    weights = hann(part.size, sym=False)
    turns = np.exp(-2j * np.pi * np.arange(part.size) / 48)
    return float(2 * abs(np.sum(weights * part * turns)) / weights.sum())


def test_the_suns_day_is_out_of_both_and_the_level_stays(product):
    whole = daily_cycle(SERIES)
    assert whole > 0.08
    # -66 and -65 dB are less than a thousandth, as the spec promises.
    assert daily_cycle(result(product, "tide")) < whole / 1000
    assert daily_cycle(result(product, "without_tides")) < whole / 1000
    level = result(product, "without_tides")["2016-08-01":"2017-02-16"].mean()
    assert abs(level - SERIES["2016-08-01":"2017-02-16"].mean()) < 0.02


def test_any_reader_of_zarr_opens_the_product_without_a_warning(product):
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        for name in RESULTS:
            opened = xr.open_zarr(product, group=name)
            assert opened[name].attrs["units"] == "degree_Celsius"
            assert opened["time"].dtype == np.dtype("datetime64[ns]")
            # The stamp that is there twice is there twice.
            assert opened["time"].to_index().duplicated().sum() == 1


@pytest.mark.parametrize(
    "how",
    [
        {"chunk": 719},
        {"chunk": 19226},
        {"chunk": 6829, "zarr_format": 2},
        {"chunk": 500, "shards": (5000,)},
    ],
    ids=lambda how: " ".join(f"{key} {value}" for key, value in how.items()),
)
def test_the_bits_do_not_depend_on_how_the_source_is_stored(product, tmp_path, how):
    other = filtered(SPEC, source(tmp_path, **how), tmp_path / "product")
    assert bits(other, RESULTS) == bits(product, RESULTS)


def test_packed_as_archives_do_it_the_numbers_are_those_of_the_unpacked_values(product, tmp_path):
    packing = {"dtype": "int16", "scale_factor": 0.001, "_FillValue": -32768}
    store = source(tmp_path, zarr_format=2, **packing)
    other = filtered(SPEC, store, tmp_path / "product")
    for name in RESULTS:
        got = result(other, name)
        assert got.dtype == np.float32  # integers are kept so unless a spec says otherwise
        wanted = result(product, name)
        pd.testing.assert_series_equal(got, wanted, check_dtype=False, rtol=2e-7, atol=1e-9)


@pytest.mark.parametrize("command", ["check", "forecast", "filter"])
def test_unless_the_spec_says_split_every_break_is_refused_by_name_and_time(
    tmp_path, capsys, command
):
    whole = stated_otherwise(SPEC, "    breaks: split ", "    # ", tmp_path / "whole.yaml")
    product = tmp_path / "product"
    to = [product] if command == "filter" else []
    assert call(command, whole, source(tmp_path), *to) == 4
    lines = capsys.readouterr().err.splitlines()
    assert len(lines) == 3
    parts = stretches(SERIES)
    samples = np.cumsum([part.size for part in parts])
    found = ["jumps: the step is 3600 s", "jumps: the step is 43200 s", "repeats: the step is 0 s"]
    for line, part, sample, what in zip(lines, parts[1:], samples[:-1], found, strict=True):
        assert "temperature, coordinate time" in line
        assert f"sample {sample}, {part.index[0].isoformat()}" in line
        assert what in line
        assert "breaks: split" in line
    assert not product.exists()
