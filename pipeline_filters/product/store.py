"""A product: inspected, prepared, held, written to and ended."""

from __future__ import annotations

import shutil
import uuid
from collections.abc import Iterable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from math import ceil
from pathlib import Path
from typing import Any

import numpy as np
import zarr
from numpy.typing import NDArray

from pipeline_filters.errors import CommandLineError, Problem
from pipeline_filters.product import inspection
from pipeline_filters.product.agreement import names_in_the_way, refuse_disagreement
from pipeline_filters.product.chunk_files import plain_form
from pipeline_filters.product.creation import (
    clear_partial_files,
    clear_unlisted,
    create_result,
    create_root,
    history_line,
    list_results,
    plain,
    time_fill,
    unlist_results,
)
from pipeline_filters.product.lock import hold_file
from pipeline_filters.product.nodes import change_attributes, copy_is_fresh, read_node, refresh_copy
from pipeline_filters.product.places import COEFFICIENTS, REGISTER, lock_file
from pipeline_filters.product.plan import Json, ProductState, ResultPlan, ResultState
from pipeline_filters.product.refusals import damaged, refuse_overlap, refused_by_the_system
from pipeline_filters.product.register import Register
from pipeline_filters.product.writer import NS_PER_S, UnitWriter


class Product:
    """A product that has been prepared, for the coordinating process.

    Attributes:
        path: of the store.
        results: the results in it, as stored.
        notes: what a person may want to know, such as chunks that stay as they were made.
    """

    def __init__(
        self, path: Path, results: Mapping[str, ResultState], surroundings: dict[str, Any]
    ) -> None:
        self.path = path
        self.results = dict(results)
        self.notes: tuple[str, ...] = ()
        self._surroundings = surroundings

    @staticmethod
    def inspect(path: str | Path) -> ProductState:
        """What lies at ``path``; never writes.

        Raises:
            ProductError: something else lies there, or a damaged product.
        """
        return inspection.inspect(path)

    @classmethod
    def prepare(
        cls,
        path: str | Path,
        *,
        spec_text: str,
        source_identity: Mapping[str, Json],
        source_path: str | Path | None,
        plans: Sequence[ResultPlan],
        surroundings: Mapping[str, Json],
    ) -> Product:
        """Makes what is absent, compares what is there; nothing is written if anything is refused.

        Results with the digest that they have in the plans are taken as they are, with their
        chunks; a changed spec text is stored. Results that no plan names stay untouched.

        Raises:
            ProductError: another digest under a result's name, another source, not ours, damaged.
            SourceError: the product lies in its source, or holds it.
            SpecError: a result's name that the store needs for something else.
            HeldError: another run holds the product.
            SurroundingsError: the target is full or not writable.
        """
        if "://" in str(path):
            raise CommandLineError(
                Problem(str(path), "is not a path", "a product on a local path", "name a folder")
            )
        root = Path(path)
        refuse_overlap(root, source_path)
        names_in_the_way(plans)
        identity = plain(source_identity)
        state = inspection.inspect(root)
        refuse_disagreement(root, state, identity, plans)
        product = cls(root, state.results, plain(surroundings))
        if _up_to_date(root, state, spec_text, identity, plans):
            product._note_layouts(plans)
            return product
        with hold_file(lock_file(root), root):
            # Another run may have come first.
            state = inspection.inspect(root)
            refuse_disagreement(root, state, identity, plans)
            with refused_by_the_system(root):
                product._complete(state, spec_text, identity, plans)
                clear_partial_files(root, ())
        product._note_layouts(plans)
        return product

    @contextmanager
    def hold(self) -> Iterator[None]:
        """Holds the product until the context ends, or the process, however it ends.

        Files that killed writers of results still growing have left half written are taken
        away on entering.

        Raises:
            HeldError: another run holds it; on entering.
            SurroundingsError: the target is not writable.
        """
        with hold_file(lock_file(self.path), self.path):
            growing = [name for name, state in self.results.items() if state.state == "growing"]
            with refused_by_the_system(self.path):
                clear_partial_files(self.path, growing)
            yield

    def stored_coefficients(self, result: str) -> dict[str, NDArray[Any]] | None:
        """The coefficients that the result was made with, or None where it is not there.

        Raises:
            ProductError: they cannot be read.
        """
        if result not in self.results:
            return None
        return read_coefficients(self.path, result)

    def grid(self, result: str) -> tuple[int, ...]:
        """Storage units of the result along each of its dimensions."""
        state = self.results[result]
        return tuple(ceil(n / u) for n, u in zip(state.shape, state.unit, strict=True))

    def writer(self, result: str) -> UnitWriter:
        """A writer of the result's units, to be sent to workers."""
        state = self.results[result]
        time = None if state.axis_kind == "counted" else state.dims[state.time_dim]
        folder = self.path / result
        fill = time_fill(state.axis_kind)
        return UnitWriter(
            path=str(self.path),
            result=result,
            time=time,
            axis_kind=state.axis_kind,
            shape=state.shape,
            unit=state.unit,
            dtype=state.dtype,
            time_dim=state.time_dim,
            form=plain_form(read_node(folder / result), np.nan),
            time_form=None if time is None else plain_form(read_node(folder / time), fill),
            token=uuid.uuid4().hex,
        )

    def register(self, result: str) -> Register:
        """The register of a result; one at a time, for the process that holds the product."""
        return Register(self.path / REGISTER / result, result, self._surroundings)

    def end(self, result: str, published_until: int | None, summary: Mapping[str, Json]) -> None:
        """Marks a result as ended: state, history, and until when it is published.

        Args:
            published_until: ns of the last published stamp (since 1970, or since zero for an
                elapsed axis); for a counted axis the number of published results.
            summary: of the run, kept with the result; JSON-able.

        Raises:
            SurroundingsError: the target is full or not writable.
        """
        state = self.results[result]
        with refused_by_the_system(self.path):
            before = read_node(self.path / result)["attributes"]
            attributes: dict[str, Any] = {"state": "ended", "run": plain(summary)}
            if published_until is not None:
                attributes["published_until"] = _published(state, published_until)
            until = attributes.get("published_until", "its end")
            line = history_line(f"result {result} ended, published until {until}")
            attributes["history"] = f"{before['history']}\n{line}"
            change_attributes(self.path / result, attributes)
            refresh_copy(self.path)
        self.results = dict(inspection.inspect(self.path).results)

    def discard(self, results: Iterable[str]) -> None:
        """Takes away results of which nothing is done; the product too where none is left.

        For a run that was refused before it had made anything: what it had made room for
        would stand in the way of the same run with a mended spec. To be called within
        ``hold``.

        Raises:
            SurroundingsError: the target is not writable.
        """
        empty = {name for name in results if not self.register(name).done().any()}
        left = {name: state for name, state in self.results.items() if name not in empty}
        if not empty:
            return
        with refused_by_the_system(self.path):
            if left:
                unlist_results(self.path, empty)
                for name in empty:
                    clear_unlisted(self.path, name)
                refresh_copy(self.path)
            else:
                shutil.rmtree(self.path)
        self.results = left

    def _complete(
        self,
        state: ProductState,
        spec_text: str,
        identity: Mapping[str, Json],
        plans: Sequence[ResultPlan],
    ) -> None:
        create_root(self.path)
        for plan in plans:
            if plan.name not in state.results:
                clear_unlisted(self.path, plan.name)
                create_result(self.path, plan)
        digests = {name: known.digest for name, known in state.results.items()}
        digests |= {plan.name: plan.digest for plan in plans}
        list_results(
            self.path,
            spec_text=spec_text,
            source_identity={**state.source_identity, **identity},
            surroundings=self._surroundings,
            digests=digests,
        )
        self.results = dict(inspection.inspect(self.path).results)

    def _note_layouts(self, plans: Sequence[ResultPlan]) -> None:
        self.notes = tuple(
            f"result {plan.name} keeps its chunks {stored.chunks}"
            + ("" if stored.shards is None else f" in shards {stored.shards}")
            + "; other ones take a product at another path"
            for plan in plans
            for stored in [self.results[plan.name]]
            if (plan.chunks, plan.shards) != (stored.chunks, stored.shards)
        )


def read_coefficients(path: Path, result: str) -> dict[str, NDArray[Any]]:
    """The arrays that a result's filters are made of.

    Raises:
        ProductError: they cannot be read.
    """
    try:
        group = zarr.open_group(str(path), path=f"{COEFFICIENTS}/{result}", mode="r")
        return {name: np.asarray(array[...]) for name, array in sorted(group.arrays())}
    except Exception as error:
        where = path / COEFFICIENTS / result
        raise damaged(where, f"the coefficients of result {result}", error) from error


def _up_to_date(
    root: Path,
    state: ProductState,
    spec_text: str,
    identity: Mapping[str, Json],
    plans: Sequence[ResultPlan],
) -> bool:
    return (
        state.kind == "ours"
        and state.spec_text == spec_text
        and {**state.source_identity, **identity} == state.source_identity
        and all(plan.name in state.results for plan in plans)
        and copy_is_fresh(root)
    )


def _published(state: ResultState, until: int) -> Json:
    if state.axis_kind == "stamped":
        return f"{np.datetime64(until, 'ns')}Z"
    if state.axis_kind == "elapsed":
        return until / NS_PER_S
    return until
