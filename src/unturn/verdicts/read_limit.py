"""Reading one ``[[limits]]`` table: what it is of, its statistic, bounds and unit, what it consents to."""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping
from typing import Any

from unturn.errors import UsageError, close_matches
from unturn.kinematics._finite import BASES
from unturn.measures import MEASURES, SURFACE_AXES, choose_measures
from unturn.options import StrainOptions
from unturn.surface import SURFACE_MEASURES, choose_surface_measures
from unturn.toml_keys import Path, Source, read_table
from unturn.verdicts.columns import MAGNITUDE
from unturn.verdicts.limit import At, Limit, Quantity, Waiver
from unturn.verdicts.limit_keys import LIMIT_KEYS, WAIVER_KEYS
from unturn.verdicts.statistic import STATISTICS, Statistic
from unturn.verdicts.units import OF_MEASURE, UNITS, Unit
from unturn.written_regions.kinds import RegionSpec
from unturn.written_regions.read import check_names

_VECTOR = 3


def read_limit(
    source: Source,
    place: Path,
    table: Any,
    regions: Mapping[str, RegionSpec],
    options: StrainOptions,
    surface_poisson: float | None = None,
) -> list[Limit]:
    """Return the limits of one table: one for each of its regions.

    Raises
    ------
    UsageError
        The table says something that is not known, or contradicts itself.
    """
    found = read_table(source, place, table, LIMIT_KEYS)
    reader = _Reader(source, place, found, surface_poisson)
    if not re.fullmatch(r"[\w.:-]+", found["id"]):
        raise reader.error("id", "an id has letters, digits, '_', '.', ':' and '-' only.")
    statistic = STATISTICS[found["statistic"]]
    quantity, measured = reader.quantity(options)
    unit = reader.unit(measured, statistic)
    reader.check_statistic(statistic, quantity)
    waiver = None
    if found["waiver"] is not None:
        waiver = Waiver(**read_table(source, (*place, "waiver"), found["waiver"], WAIVER_KEYS))
    several = isinstance(found["region"], tuple)
    names = found["region"] if several else (found["region"],)
    check_names(source, (*place, "region"), names, regions)
    threshold = found["above"] if found["above"] is not None else found["below"]
    made = []
    for name in names:
        low, high = (reader.bound(key, name, names) for key in ("at_least", "at_most"))
        reader.check_levels(low, high)
        made.append(
            Limit(
                id=f"{found['id']}/{name}" if several else found["id"],
                quantity=quantity, region=name, statistic=statistic.name, unit=unit, reason=found["reason"],
                source=found["source"], percent=found["percent"], above=_based(unit, found["above"]),
                below=_based(unit, found["below"]), threshold=threshold, at_least=low, at_most=high,
                at_least_array=found["at_least_array"], at_most_array=found["at_most_array"],
                warn_below=found["warn_below"], warn_above=found["warn_above"],
                stored_in=None if quantity.measure else UNITS[found["stored_in"] or unit.name],
                plus_minus=found["plus_minus"],
                steps=(found["steps"],) if isinstance(found["steps"], int) else found["steps"],
                accept=frozenset(found["accept"]), waiver=waiver, title=found["title"],
            )
        )  # fmt: skip
    return made


def _based(unit: Unit, value: float | None) -> float | None:
    return None if value is None else unit.to_base(value)


class _Reader:
    """Checks that the keys of one limit fit each other."""

    def __init__(
        self, source: Source, place: Path, found: Mapping[str, Any], surface_poisson: float | None
    ) -> None:
        self.source, self.place, self.found = source, place, found
        self.surface_poisson = surface_poisson

    def error(self, key: str, what: str) -> UsageError:
        return self.source.error((*self.place, key), what)

    def given(self, *names: str) -> list[str]:
        """Return which of some keys are written with a value that counts."""
        return [n for n in names if self.found[n] not in (None, "", ())]

    def refuse(self, names: Iterable[str], why: str) -> None:
        for name in self.given(*names):
            raise self.error(name, why)

    # --- what it is of

    def quantity(self, options: StrainOptions) -> tuple[Quantity, str]:
        """Return what the limit is of, and of which quantity its unit is (empty: any)."""
        found = self.found
        if len(self.given("measure", "array")) != 1:
            raise self.error("measure", "a limit is of one thing: give 'measure' or 'array', and not both.")
        if found["array"] is not None:
            return self._of_array(), ""
        self.refuse(("stored_in", "plus_minus"), "it goes with 'array'; of a measure it is known.")
        at: At = found["at"] or "centroid"
        name, components, unit, finite = self._on_surface() if at == "surface" else self._on_mesh(options)
        if finite and options.solve == "linear":
            raise self.error(
                "base" if found["base"] != "small" else "measure",
                f"{name} is a finite measure, and [result] states a linear solve, which used the small strain.",
            )
        if found["frame"] is not None:
            components = self._in_frame(name, components, at)
        component = self._component(name, components)
        return Quantity(name, True, component, at, found["frame"], found["base"]), OF_MEASURE[unit]

    def _of_array(self) -> Quantity:
        found = self.found
        self.refuse(("frame",), "components of an array of the file are as they are stored: leave it out.")
        if found["base"] != "small":
            raise self.error("base", "an array of the file has no base: leave it out.")
        if found["at"] in ("mean", "surface"):
            raise self.error(
                "at", 'an array of the file is at "centroid" (cells) or at "nodes"; it is not computed.'
            )
        return Quantity(found["array"], False, found["component"], found["at"])

    def _on_mesh(self, options: StrainOptions) -> tuple[str, tuple[str, ...], str, bool]:
        name = self.found["measure"]
        if name in (*SURFACE_AXES, "all") or name.startswith("principal_direction"):
            raise self.error("measure", f"{name!r} is no number that can be limited.")
        try:
            (array,) = choose_measures([name], self.found["base"], options.thermal_expansion is not None)
        except UsageError as error:
            raise self.error("measure", _without_options(error)) from None
        if array not in MEASURES:
            return array, (), "1", False
        row = MEASURES[array]
        return array, row.components, row.unit, row.finite

    def _on_surface(self) -> tuple[str, tuple[str, ...], str, bool]:
        name = self.found["measure"]
        known = [
            m.replaces for m in SURFACE_MEASURES.values() if m.base == "small" and m.replaces in MEASURES
        ]
        known = [n for n in known if not n.startswith("principal_direction")]
        if name not in known:
            raise self.error(
                "measure",
                f"no measure on free surfaces is called {name!r}.{close_matches(name, known)} Measures: "
                f"{', '.join(known)}.",
            )
        try:
            (array,) = choose_surface_measures([name], self.found["base"], self.surface_poisson)
        except UsageError as error:
            raise self.error("measure", _without_options(error)) from None
        row = SURFACE_MEASURES[array]
        return array, row.components, MEASURES[name].unit, row.finite

    def _in_frame(self, name: str, components: tuple[str, ...], at: str) -> tuple[str, ...]:
        if at == "surface" or name not in MEASURES or not MEASURES[name].turns:
            raise self.error(
                "frame", f"{name} at {at!r} has no components that a frame could turn: leave it out."
            )
        letters = ("R", "T", "Z") if self.found["frame"].split()[0] == "cylindrical" else ("1", "2", "3")
        if len(components) == _VECTOR:
            return letters
        of_letter = dict(zip("XYZ", letters))
        return tuple("".join(of_letter[c] for c in name) for name in components)

    def _component(self, name: str, components: tuple[str, ...]) -> str:
        asked: str = self.found["component"]
        if self.found["statistic"] == "tensor_range":
            self.refuse(("component",), "'tensor_range' is of the whole tensor: leave it out.")
            return ""
        vector = len(components) == _VECTOR and not name.startswith(("principal_", "surface_principal_"))
        known = (*components, MAGNITUDE) if vector else components
        if not components and asked:
            raise self.error("component", f"{name} is one number and has no components: leave it out.")
        if components and asked not in known:
            said = f"{name} has no component {asked!r}." if asked else f"{name} has components: name one."
            raise self.error("component", f"{said} Components: {', '.join(known)}.")
        return asked

    # --- statistic, bounds, unit

    def unit(self, measured: str, statistic: Statistic) -> Unit:
        unit = UNITS[self.found["unit"]]
        if measured and unit.quantity != measured:
            fitting = [u.name for u in UNITS.values() if u.quantity == measured]
            raise self.error("unit", f"{unit.name} is no unit of this measure. Units: {', '.join(fitting)}.")
        stored = self.found["stored_in"]
        if stored is not None and UNITS[stored].quantity != unit.quantity:
            raise self.error("stored_in", f"{stored} and {unit.name} are units of different things.")
        return unit

    def check_statistic(self, statistic: Statistic, quantity: Quantity) -> None:
        found, needs = self.found, statistic.needs
        if (needs == "percent") is not (found["percent"] is not None):
            said = "needs 'percent'" if needs == "percent" else "has no 'percent'"
            raise self.error("percent", f"the statistic {statistic.name!r} {said}.")
        thresholds = self.given("above", "below")
        if len(thresholds) != (1 if needs == "threshold" else 0):
            said = "needs one of 'above' and 'below'" if needs == "threshold" else "has no threshold"
            raise self.error((thresholds or ["above"])[-1], f"the statistic {statistic.name!r} {said}.")
        if statistic.over_steps:
            self._check_over_steps(statistic, quantity)
        self._check_arrays(statistic)

    def _check_over_steps(self, statistic: Statistic, quantity: Quantity) -> None:
        if not quantity.measure or quantity.at not in ("centroid", "mean"):
            raise self.error(
                "statistic", f"{statistic.name!r} is of a measure at centroids or of element means."
            )
        if isinstance(self.found["steps"], int) or self.found["steps"] == "last":
            raise self.error("steps", f"{statistic.name!r} needs several steps.")
        if statistic.name != "tensor_range":
            return
        tensors = ("strain", *(f"strain_{b}" for b in BASES if b != "almansi"))
        if quantity.name not in tensors or quantity.frame is not None:
            raise self.error(
                "measure",
                "'tensor_range' is of the measure 'strain', of any base but almansi, whose axes turn with the body; "
                "without a frame.",
            )

    def _check_arrays(self, statistic: Statistic) -> None:
        arrays = self.given("at_most_array", "at_least_array")
        if not arrays:
            return
        if arrays != [f"{statistic.per_cell}_array"]:
            fitting = " and ".join(
                f"'{s.per_cell}_array' with {s.name!r}" for s in STATISTICS.values() if s.per_cell
            )
            raise self.error(arrays[-1], f"bounds from an array are compared value by value: {fitting}.")
        self.refuse(
            ("at_most", "at_least", "warn_above", "warn_below"),
            f"a limit with {arrays[0]!r} has no other bound or level: write a second limit.",
        )

    def bound(self, key: str, region: str, names: tuple[str, ...]) -> float | None:
        """Return the bound in one region."""
        written = self.found[key]
        if not isinstance(written, dict):
            return None if written is None else float(written)
        if set(written) != set(names):
            odd = sorted(set(written) ^ set(names))[0]
            raise self.error(key, f"its regions must be those of 'region', one number each; look at {odd!r}.")
        return float(written[region])

    def check_levels(self, low: float | None, high: float | None) -> None:
        """Refuse bounds and levels that do not lie in order."""
        if low is None and high is None and not self.given("at_most_array", "at_least_array"):
            raise self.error(
                "id", "the limit has no bound: nothing could be exceeded. Give 'at_most' or 'at_least'."
            )
        for level, bound, key, side in (
            (self.found["warn_above"], high, "warn_above", "at_most"),
            (self.found["warn_below"], low, "warn_below", "at_least"),
        ):
            if level is not None and bound is None:
                raise self.error(key, f"it is a level within {side!r}, which is missing.")
        if self.found["statistic"] == "share":
            for key, bound in (("at_least", low), ("at_most", high)):
                if bound is not None and not 0 <= bound <= 100:
                    raise self.error(
                        key, f"a share is from 0 to 100 percent of the volume: {bound:g} says nothing."
                    )
        order = [v for v in (low, self.found["warn_below"], self.found["warn_above"], high) if v is not None]
        if order != sorted(order):
            raise self.error(
                "at_most" if high is not None else "at_least",
                "bounds and levels must rise in the order at_least, warn_below, warn_above, at_most.",
            )


def _without_options(error: UsageError) -> str:
    """Return what an error says with keys of the file in place of options."""
    said = str(error).replace("state Poisson's ratio with --poisson NU", "give surface_poisson in [reading]")
    return said.replace(
        "give --thermal-expansion, --temperature and --reference-temperature", "state it in [reading]"
    )
