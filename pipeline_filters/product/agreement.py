"""Whether a product agrees with what is asked of it now; all disagreements at once."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np

from pipeline_filters.errors import Problem, ProductError, SpecError
from pipeline_filters.product.places import MARK, PARTIAL, RESERVED
from pipeline_filters.product.plan import Json, ProductState, ResultPlan


def names_in_the_way(plans: Sequence[ResultPlan]) -> None:
    """Refuses result names that the store needs for something else.

    Raises:
        SpecError: every such name.
    """
    problems = []
    for plan in plans:
        where = f"result {plan.name}"
        if plan.name in RESERVED or not plan.name or plan.name[0] in "._" or "/" in plan.name:
            problems.append(
                Problem(where, "the product keeps this name for itself", remedy="rename the result")
            )
        elif plan.name in (*plan.dims, *plan.coords):
            problems.append(
                Problem(
                    where,
                    "a dimension or coordinate of its signal has the same name",
                    "a name of its own, as both lie in one group",
                    "rename the result",
                )
            )
    if problems:
        raise SpecError(*problems)


def refuse_disagreement(
    root: Path, state: ProductState, identity: Mapping[str, Json], plans: Sequence[ResultPlan]
) -> None:
    """Refuses a product that is of another spec or source.

    Raises:
        ProductError: every disagreement.
    """
    problems = list(_source_problems(root, state.source_identity, identity))
    for plan in plans:
        stored = state.results.get(plan.name)
        if stored is None:
            problems += _stranger(root, plan.name)
        elif stored.digest != plan.digest:
            problems.append(
                Problem(
                    str(root / plan.name),
                    f"result {plan.name} was made by another spec: its digest is "
                    f"{stored.digest[:12]}, the spec's {plan.digest[:12]}",
                    "the spec that it was made by",
                    "give the result a new name in the spec, or name another product",
                )
            )
        elif not problems and _form(stored) != _form(plan):
            problems.append(
                Problem(
                    str(root / plan.name),
                    f"result {plan.name} has the form {_form(stored)}, now it would be "
                    f"{_form(plan)}",
                    "the form that it was made with",
                    "name another product",
                )
            )
    if problems:
        raise ProductError(*problems)


def _form(one: Any) -> str:
    parts = [f"{name} {size}" for name, size in zip(one.dims, one.shape, strict=True)]
    return f"{np.dtype(one.dtype).name} ({', '.join(parts)}), {one.axis_kind}"


def _stranger(root: Path, name: str) -> list[Problem]:
    """A folder under a result's name that no creation of ours has left."""
    folder = root / name
    if not folder.exists():
        return []
    if folder.is_dir():
        if all(PARTIAL.search(entry.name) for entry in folder.iterdir()):
            return []
        file = folder / "zarr.json"
        if file.is_file() and f'"{MARK}"'.encode() in file.read_bytes():
            return []
    return [
        Problem(
            str(folder),
            "something that is not of this product lies under a result's name",
            remedy="take it away by hand, or rename the result in the spec",
        )
    ]


def _source_problems(
    root: Path, stored: Mapping[str, Json], now: Mapping[str, Json]
) -> Iterator[Problem]:
    for name in sorted(stored.keys() & now.keys()):
        differences = list(_differences(name, stored[name], now[name]))
        if not differences:
            continue
        found = "; ".join(f"{where} was {one}, is {two}" for where, one, two in differences)
        if _has_grown(stored[name], now[name]):
            yield Problem(
                str(root),
                f"the source has grown since this product was made: {found}",
                "increments are not taken yet",
                "name a new product for the longer source, or filter the source as it was",
            )
        else:
            yield Problem(
                str(root),
                f"the product was made from another source: {found}",
                "the source that it was made from",
                "name another product for this source",
            )


def _differences(where: str, one: Json, two: Json) -> Iterator[tuple[str, Json, Json]]:
    if isinstance(one, dict) and isinstance(two, dict):
        for key in sorted(one.keys() | two.keys()):
            yield from _differences(f"{where}.{key}", one.get(key), two.get(key))
    elif one != two:
        yield where, one, two


def _has_grown(one: Json, two: Json) -> bool:
    """Whether two identities tell of one source that got longer: only shape and end differ."""
    if not (isinstance(one, dict) and isinstance(two, dict) and one.keys() == two.keys()):
        return False
    differing = {key for key in one if one[key] != two[key]}
    before, after = one.get("shape"), two.get("shape")
    if not differing <= {"shape", "stamps_ns"} or not before or not after:
        return False
    pairs = list(zip(before, after, strict=False))
    longer = [b < a for b, a in pairs]
    ends, now = one.get("stamps_ns"), two.get("stamps_ns")
    # A channel more leaves the stamps as they are, and is no growth.
    went_on = ends is now is None or (ends and now and ends[0] == now[0] and ends[1] < now[1])
    return bool(
        len(before) == len(after) and sum(longer) == 1 and all(b <= a for b, a in pairs) and went_on
    )
