"""From a result and what pictures ask for to their subjects: everything is computed and shaped once."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import replace
from functools import cached_property
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from unturn.errors import UsageError
from unturn.fields import compute_fields
from unturn.model import Model
from unturn.numbering import element_numbers, node_numbers
from unturn.picture_keys import At, PictureRequest
from unturn.pictures._columns import arrows_of, displacement_values, file_values, measure_values
from unturn.pictures._measure import (
    LOCATIONS,
    TURNING,
    Wanted,
    directions_with,
    rotation_with,
    turns_with,
    wanted,
)
from unturn.pictures._range import Ends, ends_of
from unturn.pictures._stage import Stage
from unturn.pictures._subject import Subject
from unturn.pictures._values import Values
from unturn.pipeline import Computed, StrainOptions, compute, model_of
from unturn.regions import named_regions
from unturn.result import Result
from unturn.written_regions.finder import RegionFinder
from unturn.written_regions.kinds import RegionSpec
from unturn.written_regions.select import Cells, NoRegion

Floats = NDArray[np.float64]


class Step:
    """One step of a result, for any number of pictures.

    Parameters
    ----------
    result
        As read.
    requests
        The pictures that will be asked for.
    options
        How strain is computed; `measures` and `at` are those of the requests.
    zero
        The step from which displacements are measured.
    surface_poisson
        Poisson's ratio of solids, for values on their free faces; None: that of the options.
    regions
        Regions that a plan defines.

    Raises
    ------
    UsageError
        A measure that does not exist, or options that do not fit the mesh.
    """

    def __init__(
        self,
        result: Result,
        requests: Sequence[PictureRequest],
        options: StrainOptions | None = None,
        zero: Result | None = None,
        surface_poisson: float | None = None,
        regions: Mapping[str, RegionSpec] | None = None,
    ) -> None:
        self.result, self._zero = result, zero
        self.options = options or StrainOptions()
        self._surface_poisson, self._regions = surface_poisson, regions or {}
        self._percentiles = any(r.range.how == "percentile" for r in requests)
        self._names: dict[At, dict[str, None]] = {}
        for request in requests:
            with request.told_where():
                names = self._arrays(request)
            if names:
                self._names.setdefault(request.at, {}).update(dict.fromkeys(names))
        self._computed: dict[At, Computed] = {}
        self._stages: dict[bool, Stage] = {}
        self._columns: dict[tuple[At, str], Values] = {}

    def _arrays(self, request: PictureRequest) -> list[str]:
        """Return the measures that must be computed for a picture."""
        what = wanted(request.measure, self.result, self.options, request.at)
        _check(request, self.options, what)
        names = [what.array] if what.kind == "measure" else []
        if request.arrows == "principal":
            values, directions = directions_with(what.array, self.options.base, request.at)
            names += [values, *directions, *([TURNING] if turns_with(values) else [])]
        elif request.arrows == "rotation":
            names.append(rotation_with(what.array, self.options.base))
        return names

    def computed(self, at: At) -> Computed:
        """Return the fields at a place."""
        if at not in self._computed:
            options = replace(self.options, at=at, measures=list(self._names[at]), base="small")
            if at == "surface" and self._surface_poisson is not None:
                options = replace(options, poisson=self._surface_poisson)
            found = compute(self.result, options, zero=self._zero, diagnose=self._percentiles)
            found.require_some()
            self._computed[at] = found
        return self._computed[at]

    @cached_property
    def model(self) -> Model:
        """The model of the step."""
        for at in self._names:
            return self.computed(at).fields.model
        if self._zero is not None:
            options = replace(self.options, measures=["strain"], base="small")
            return compute(self.result, options, zero=self._zero).fields.model
        return model_of(self.result, self.options)

    @cached_property
    def _finder(self) -> RegionFinder:
        """Finds the regions that the plan defines."""
        fields = compute_fields(self.model, ["element_volume"], diagnose=True, threads=self.options.threads)
        d = fields.diagnostics
        assert d is not None
        return RegionFinder(self._regions, Cells(self.model, d.centroid, d.dimension))

    def stage(self, of_faces: bool = False) -> Stage:
        """Return the mesh of the file, or that of the free faces, with its displacement."""
        if of_faces not in self._stages:
            u, points = self.model.displacement.values, self.model.points
            if of_faces:
                surface = self.computed("surface").surface
                assert surface is not None
                used = np.unique(np.concatenate([b.connectivity.reshape(-1) for b in surface.faces.blocks]))
                self._stages[True] = Stage(surface.result, u[used], points[used])
            else:
                self._stages[False] = Stage(self.model.result, u, points)
        return self._stages[of_faces]

    def subject(self, request: PictureRequest) -> Subject:
        """Return what a picture is of.

        Raises
        ------
        UsageError
            No such component, region or array.
        InputError
            The result cannot be used.
        """
        what = wanted(request.measure, self.result, self.options, request.at)
        key = (request.at, request.measure)
        if key not in self._columns:
            self._columns[key] = self._values(what, request.at)
        association: Literal["cell", "point"] = "cell"
        if what.kind in ("point", "displacement") or (what.kind == "measure" and request.at == "nodes"):
            association = "point"
        of_faces = what.kind == "measure" and request.at == "surface"
        location = LOCATIONS[request.at if what.kind == "measure" else "centroid"]
        if what.kind != "measure":
            location = "at the nodes" if association == "point" else "of each cell"
        stage, arrows = self.stage(of_faces), None
        if request.arrows != "none":
            factor = stage.shape(request.factor).factor
            arrows = arrows_of(self.computed(request.at), request, what, self.options, factor)
        return Subject(
            stage, self._columns[key], association, location, self._numbers(association, of_faces),
            self._weights(what), self._region(of_faces), arrows, of_faces,
        )  # fmt: skip

    def ends(self, request: PictureRequest) -> Ends:
        """Return the ends of the colour range that a picture asks for, by itself."""
        subject = self.subject(request)
        which = subject.which(subject.shown(request))
        weights = subject.weights if subject.association == "cell" else None
        found = ends_of(
            request.range,
            subject.values.numbers[which],
            None if weights is None else weights[which],
            subject.values.scale,
        )
        return found.symmetric() if request.symmetric else found

    def _values(self, what: Wanted, at: At) -> Values:
        if what.kind == "displacement":
            return displacement_values(self.model, what)
        if what.kind != "measure":
            return file_values(self.result, what)
        return measure_values(self.computed(at), what, at, self.options)

    def _numbers(self, association: str, of_faces: bool) -> NDArray[Any] | None:
        if of_faces:
            return self.stage(True).result.cell_data.get("parent_element")
        found = element_numbers(self.result) if association == "cell" else node_numbers(self.result)
        return None if found is None else found.numbers

    def _weights(self, what: Wanted) -> Floats | None:
        if not self._percentiles or what.kind != "measure":
            return None
        for computed in self._computed.values():
            d = computed.fields.diagnostics
            if d is not None and computed.surface is None:
                return d.volume
        return None

    def _region(self, of_faces: bool) -> Callable[[str], NDArray[np.int64]]:
        everything = np.ones(self.result.n_cells, dtype=bool)

        def find(name: str) -> NDArray[np.int64]:
            if name in self._regions:
                try:
                    cells = np.flatnonzero(self._finder.find(name).inside)
                except NoRegion as error:
                    raise UsageError(f"{error}.") from None
            else:
                cells = named_regions(self.model, [name], everything)[0].cells
            if not of_faces:
                return cells
            return np.flatnonzero(np.isin(self.stage(True).result.cell_data["parent_cell"], cells))

        return find


def _check(request: PictureRequest, options: StrainOptions, what: Wanted) -> None:
    if request.at not in LOCATIONS:
        raise UsageError(f"a picture is drawn of values at {', '.join(LOCATIONS)}; not at {request.at!r}.")
    if request.arrows == "rotation" and options.frame is not None:
        raise UsageError("axes of rotation are drawn in the axes of the file: leave --frame or --arrows out.")
    if request.arrows != "none" and request.at == "surface" and what.kind != "measure":
        raise UsageError(
            f"{request.measure} does not live on free faces, and arrows with --at surface do: ask for another --at."
        )
