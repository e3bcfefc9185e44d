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
from unturn.measures import GEOMETRY, MEASURES
from unturn.model import Model
from unturn.numbering import element_numbers, node_numbers
from unturn.options import Place
from unturn.picture_keys import PictureRequest
from unturn.pictures._measure import Wanted, directions_with, rotation_with, spoken, wanted
from unturn.pictures._range import Ends, ends_of
from unturn.pictures._stage import Stage
from unturn.pictures._subject import Arrows, Subject
from unturn.pictures._values import Values, values_of, values_with
from unturn.pipeline import Computed, StrainOptions, compute, model_of
from unturn.regions import named_regions
from unturn.result import Result
from unturn.summary import equivalent_form
from unturn.written_regions.finder import RegionFinder
from unturn.written_regions.kinds import RegionSpec
from unturn.written_regions.select import Cells, NoRegion

Floats = NDArray[np.float64]
LOCATIONS: dict[str, str] = {
    "centroid": "at element centroids",
    "mean": "mean over each element",
    "nodes": "recovered at the nodes",
    "surface": "on free faces, at their centroids",
}
"""Where values live, in words."""


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
        self._names: dict[Place, dict[str, None]] = {}
        for request in requests:
            with request.told_where():
                _check_place(request)
                names = self._arrays(request)
            if names:
                self._names.setdefault(request.at, {}).update(dict.fromkeys(names))
        self._computed: dict[Place, Computed] = {}
        self._stages: dict[bool, Stage] = {}
        self._columns: dict[tuple[Place, str], Values] = {}

    def _arrays(self, request: PictureRequest) -> list[str]:
        """Return the measures that must be computed for a picture."""
        what = wanted(request.measure, self.result, self.options, request.at)
        names = [what.array] if what.kind == "measure" else []
        if request.arrows == "principal":
            values, directions = directions_with(what.array, self.options.base, request.at)
            names += [values, *directions]
        elif request.arrows == "rotation":
            names.append(rotation_with(what.array, self.options.base))
        return names

    def computed(self, at: Place) -> Computed:
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
        return Subject(
            self.stage(of_faces), self._columns[key], association, location, self._numbers(association, of_faces),
            self._weights(what), self._region(of_faces), self._arrows(request, what, of_faces), of_faces,
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

    def _values(self, what: Wanted, at: Place) -> Values:
        if what.kind == "displacement":
            u = self.model.displacement.values
            numbers = u[:, "XYZ".index(what.component)] if what.component else np.linalg.norm(u, axis=1)
            name = (
                f"displacement {what.component}" if what.component else "displacement\nlength of the vector"
            )
            return replace(values_with(numbers, name, "length unit of the file"), short_unit="")
        if what.kind != "measure":
            return self._of_file(what)
        numbers = self._column(what, at)
        name = f"{spoken(what.array)} {what.component}".rstrip()
        if what.array == "equivalent_strain":
            meaning = equivalent_form(self.options.equivalent_poisson)
        else:
            meaning = MEASURES[what.array].meaning if what.array in MEASURES else GEOMETRY.get(what.array, "")
        frame = f"\naxes: {self.options.frame}" if self.options.frame and what.component else ""
        unit = MEASURES[what.array].unit if what.array in MEASURES else "1"
        return values_with(numbers, f"{name}\n{meaning}{frame}".rstrip(), unit)

    def _of_file(self, what: Wanted) -> Values:
        component: str | int | None = what.component or None
        assert what.kind in ("cell", "point")
        if what.component.isdigit():
            component = int(what.component) - 1
        place: Literal["cell", "point"] = "cell" if what.kind == "cell" else "point"
        values = values_of(self.result, what.array, place, component, "", "unit of the array")
        return replace(values, name=f"{values.name}\narray of the file", short_unit="")

    def _column(self, what: Wanted, at: Place) -> Floats:
        arrays, components = self._held(at)
        array = f"surface_{what.array}" if at == "surface" else what.array
        if array not in arrays:
            raise UsageError(
                f"{what.array} has no value {LOCATIONS[at]}; ask for another --measure, or another --at."
            )
        held = arrays[array]
        if held.ndim == 1:
            return held
        labels = components.get(array, ())
        if what.component not in labels:
            raise UsageError(
                f"{what.array} has no component {what.component!r} here; its components are {', '.join(labels)}."
            )
        return np.ascontiguousarray(held[:, labels.index(what.component)])

    def _held(self, at: Place) -> tuple[dict[str, Floats], dict[str, tuple[str, ...]]]:
        """Return the arrays at a place, and the names of their components."""
        computed = self.computed(at)
        if at == "surface":
            assert computed.surface is not None
            mesh = computed.surface.result
            names = {array: names for (_, array), names in mesh.component_names.items()}
            return dict(mesh.cell_data), names
        found = computed.fields if computed.nodes is None else computed.nodes
        return found.arrays, found.components

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

    def _arrows(self, request: PictureRequest, what: Wanted, of_faces: bool) -> Arrows | None:
        if request.arrows == "none":
            return None
        arrays, _ = self._held(request.at)
        front = "surface_" if of_faces else ""
        if request.arrows == "principal":
            values, names = directions_with(what.array, self.options.base, request.at)
            vectors = np.stack([arrays[front + n] for n in names], axis=1)
            return Arrows(
                "principal", vectors, arrays[front + values][:, : vectors.shape[1]], 1e6, "microstrain"
            )
        turn = arrays[front + rotation_with(what.array, self.options.base)]
        angle = np.linalg.norm(turn, axis=1)
        with np.errstate(invalid="ignore", divide="ignore"):
            axis = turn / angle[:, None]
        return Arrows("rotation", axis[:, None], angle[:, None], float(np.degrees(1.0)), "degrees")


def _check_place(request: PictureRequest) -> None:
    if request.at not in LOCATIONS:
        raise UsageError(f"a picture is drawn of values at {', '.join(LOCATIONS)}; not at {request.at!r}.")
