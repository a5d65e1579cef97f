"""Many units: the register of a long recording, marked and flushed as a run would."""

from __future__ import annotations

import os

import numpy as np
from made_products import plan, prepare

UNITS = 100_000


def test_a_register_of_a_hundred_thousand_units(tmp_path):
    made = plan(shape=(UNITS // 2, 4), chunks=(1, 2), coords={}, axis_kind="counted")
    register = prepare(tmp_path / "p", made).register("gravel_band")
    assert register.grid == (UNITS // 2, 2)
    places = list(np.ndindex(*register.grid))
    left_out = {7, 4_096, UNITS - 1}
    marked = [place for index, place in enumerate(places) if index not in left_out]
    for low in range(0, len(marked), 5_000):
        batch = marked[low : low + 5_000]
        register.mark([(at, at[0].to_bytes(16, "little"), bytes([at[1]] * 16)) for at in batch])
        register.flush()
        # What is full is on disk and forgotten, so memory does not grow with the recording.
        assert len(register._blocks) <= len(left_out) + 1
    again = prepare(tmp_path / "p", made).register("gravel_band")
    absent = np.argwhere(~again.done())
    assert [tuple(at) for at in absent] == [places[index] for index in sorted(left_out)]
    for at in (places[0], places[4_095], places[4_097], places[-2]):
        assert again.digests(at) == (at[0].to_bytes(16, "little"), bytes([at[1]] * 16))
    assert again.mixture()[0]["units"] == UNITS - len(left_out)


def test_the_files_of_a_large_register_are_few(tmp_path):
    made = plan(shape=(UNITS // 2, 4), chunks=(1, 2), coords={}, axis_kind="counted")
    register = prepare(tmp_path / "p", made).register("gravel_band")
    register.mark([(at, b"i" * 16, b"o" * 16) for at in np.ndindex(*register.grid)])
    register.flush()
    files = sum(len(names) for _, _, names in os.walk(tmp_path / "p/register/gravel_band"))
    assert files == 5 + 4 * -(-UNITS // 4_096)
