"""A product opens anywhere without a warning; open_product gives the settled part."""

from __future__ import annotations

import numpy as np
import pytest
import xarray as xr
import zarr
from made_products import fill, plan, prepare

from pipeline_filters.errors import ProductError
from pipeline_filters.product.reading import open_product

VALUES = np.random.default_rng(5).standard_normal((250, 3)).astype("f4")


@pytest.fixture(params=["new", "filled", "ended"])
def product(request, tmp_path):
    """Three results, one for each kind of axis, at each stage of a product's life."""
    plans = [plan(), plan("still_band", axis_kind="elapsed"), plan("raw", axis_kind="counted")]
    made = prepare(tmp_path / "p", *plans)
    if request.param != "new":
        for name in made.results:
            fill(made, name, VALUES)
    if request.param == "ended":
        for name in made.results:
            made.end(name, 249, {"seconds": 1.0})
    return made


def test_every_level_opens_without_a_warning(product):
    # Warnings are errors in this suite.
    path = str(product.path)
    assert not xr.open_zarr(path).data_vars
    for name, state in product.results.items():
        with xr.open_zarr(path, group=name) as found:
            assert list(found.data_vars) == [name]
            assert found.attrs["state"] == state.state
            if state.axis_kind == "stamped":
                assert found.time.dtype == "M8[ns]"
        with xr.open_dataset(path, group=name, engine="zarr", chunks=None) as found:
            assert found[name].dims == ("time", "geophone")
            assert found[name].attrs["units"] == "mm/s"
            assert float(found[name].sel(geophone="g02").count()) in (0.0, 250.0)
        with xr.open_zarr(f"{path}/{name}", consolidated=False) as found:
            assert list(found.data_vars) == [name]
    with xr.open_datatree(path, engine="zarr") as tree:
        assert set(tree.children) == {*product.results, "register", "coefficients"}
    for folder in ("", "register", "coefficients", *product.results, "register/gravel_band"):
        group = zarr.open_group(path, path=folder, mode="r")
        members = dict(group.members(max_depth=None))
        loose = zarr.open_group(path, path=folder, mode="r", use_consolidated=False)
        assert dict(loose.members(max_depth=None)).keys() == members.keys()


def test_held_products_open_without_a_warning(product):
    with product.hold():
        assert zarr.open_group(str(product.path / "register"), mode="r").members()
        open_product(product.path)


def test_what_reads_back_through_xarray(tmp_path):
    product = prepare(tmp_path / "p", plan(), plan("still_band", axis_kind="elapsed"))
    fill(product, "gravel_band", VALUES, step_ns=1_500_000)
    fill(product, "still_band", VALUES, step_ns=1_500_000)
    found = xr.open_zarr(str(tmp_path / "p"), group="gravel_band").load()
    np.testing.assert_array_equal(found.gravel_band, VALUES)
    stamps = np.datetime64("1970-01-01", "ns") + np.arange(250) * np.timedelta64(1_500_000, "ns")
    np.testing.assert_array_equal(found.time, stamps)
    assert found.geophone.values.tolist() == ["g01", "g02", "g05"]
    elapsed = xr.open_zarr(str(tmp_path / "p"), group="still_band").time
    np.testing.assert_array_equal(elapsed, np.arange(250) * 1_500_000 / 1e9)
    assert elapsed.attrs["units"] == "s"


def test_the_settled_part_ends_at_the_first_gap(tmp_path):
    product = prepare(tmp_path / "p")
    assert open_product(tmp_path / "p").sizes["time"] == 0
    writer, register = product.writer("gravel_band"), product.register("gravel_band")
    for start in (0, 60, 180):
        part = VALUES[start : start + 60]
        writer.write(start, start + 60, (slice(0, 3),), part)
        writer.write_stamps(start, start + 60, np.arange(start, start + 60))
    register.mark([((t, c), b"i" * 16, b"o" * 16) for t in (0, 3) for c in (0, 1)])
    register.mark([((1, 1), b"i" * 16, b"o" * 16)])
    register.flush()
    settled = open_product(tmp_path / "p")
    assert isinstance(settled, xr.Dataset)
    np.testing.assert_array_equal(settled.gravel_band, VALUES[:60])
    register.mark([((1, 0), b"i" * 16, b"o" * 16)])
    register.flush()
    np.testing.assert_array_equal(open_product(tmp_path / "p").gravel_band, VALUES[:120])


def test_coordinates_of_any_kind_open_as_coordinates(tmp_path):
    coords = {
        "geophone": (("geophone",), np.array(["g01", "g02", "g05"], object), {}),
        "distance": (("geophone",), np.array([0.0, 1.5, 4.0]), {"units": "m"}),
        "works": (("geophone",), np.array([True, False, False]), {}),
        "gain_step": ((), np.array(0), {}),
    }
    made = plan(coords=coords, attrs={"units": "mm/s", "coordinates": "elsewhere"})
    fill(prepare(tmp_path / "p", made), "gravel_band", VALUES)
    found = open_product(tmp_path / "p")
    assert set(found.data_vars) == {"gravel_band"}
    assert set(found.coords) == {"time", *coords}
    for name, (dims, values, attrs) in coords.items():
        assert found[name].dims == dims
        assert found[name].attrs == attrs
        np.testing.assert_array_equal(found[name].values, values)
    assert found.gravel_band.sel(geophone="g05").distance == 4.0


def test_time_need_not_come_first(tmp_path):
    changes = {"dims": ("geophone", "time"), "shape": (3, 250), "chunks": (2, 60), "time_dim": 1}
    product = prepare(tmp_path / "p", plan(**changes))
    fill(product, "gravel_band", VALUES.T)
    np.testing.assert_array_equal(open_product(tmp_path / "p").gravel_band, VALUES.T)


def test_results_on_one_axis_come_as_one_dataset(tmp_path):
    product = prepare(tmp_path / "p", plan(), plan("still_band"))
    for name in product.results:
        fill(product, name, VALUES)
    found = open_product(tmp_path / "p")
    assert isinstance(found, xr.Dataset)
    assert set(found.data_vars) == {"gravel_band", "still_band"}
    assert found.sizes == {"time": 250, "geophone": 3}


@pytest.mark.parametrize("other", ["shifted", "slower", "other channels", "elapsed"])
def test_results_on_different_axes_come_as_a_tree(tmp_path, other):
    changes = {
        "shifted": {},
        "slower": {"shape": (125, 3)},
        "other channels": {
            "coords": {"geophone": (("geophone",), np.array(["g01", "g02", "g06"]), {})}
        },
        "elapsed": {"axis_kind": "elapsed"},
    }[other]
    product = prepare(tmp_path / "p", plan(), plan("still_band", **changes))
    fill(product, "gravel_band", VALUES)
    step = 1_000_001 if other == "shifted" else 1_000_000
    length = product.results["still_band"].shape[0]
    fill(product, "still_band", VALUES[:length], step_ns=step)
    found = open_product(tmp_path / "p")
    assert isinstance(found, xr.DataTree)
    assert set(found.children) == {"gravel_band", "still_band"}
    np.testing.assert_array_equal(found["still_band/still_band"], VALUES[:length])


def test_what_is_no_product_is_refused(tmp_path):
    with pytest.raises(ProductError, match="there is no product"):
        open_product(tmp_path / "no")
    zarr.create_group(str(tmp_path / "other"))
    with pytest.raises(ProductError, match="another program"):
        open_product(tmp_path / "other")


def test_a_damaged_part_is_named(tmp_path):
    product = prepare(tmp_path / "p")
    fill(product, "gravel_band", VALUES)
    file = tmp_path / "p/gravel_band/geophone/c/0"
    file.write_bytes(file.read_bytes()[:6])
    with pytest.raises(ProductError, match="result gravel_band cannot be read"):
        open_product(tmp_path / "p")
    state = tmp_path / "p/register/gravel_band/state/c/0/0"
    state.write_bytes(b"")
    with pytest.raises(ProductError, match="register of result gravel_band cannot be read"):
        open_product(tmp_path / "p")
    (tmp_path / "p/coefficients/gravel_band/taps_0/c/0").write_bytes(b"")
    with pytest.raises(ProductError, match="coefficients of result gravel_band cannot be read"):
        product.stored_coefficients("gravel_band")
