"""The record of an installation: every check of it, what it says of failures, and that it can be trusted."""

from __future__ import annotations

import copy
import hashlib
import json
from pathlib import Path

import numpy as np
import pytest

import unturn.errors
from unturn.elements import ELEMENTS, FAMILIES
from unturn.source import Source
from unturn.verdicts import installation_meshes
from unturn.verdicts.builtin_meshes import patch, straight_cell
from unturn.verdicts.installation import (
    PACKAGES,
    Installation,
    all_checks,
    check_installation,
    program_digest,
    record_data,
    record_text,
)
from unturn.verdicts.installation_checks import FORMULAS, Case, Check, compared, every_element

SOURCE = Source("practice", "made up for this test")
FEW = [c for c in FORMULAS if c.name in ("simple_shear", "rotation", "percentiles")]


@pytest.fixture(scope="module")
def whole() -> Installation:
    """All checks, run once."""
    return check_installation("2026-12-31")


@pytest.mark.practice("an installation that is sound passes its own checks")
def test_every_check_is_met_here(whole: Installation) -> None:
    assert [(f.id, f.message) for f in whole.report.findings if f.state != "met"] == []
    assert whole.report.exit_status == 0
    assert record_data(whole)["passed"] is True


@pytest.mark.derived("the table of elements is the only list of elements")
def test_every_element_has_its_patch_and_the_linear_fields_are_in_it(whole: Installation) -> None:
    found = {f.id: f for f in whole.report.findings}
    names = [name for name, _ in every_element()]
    assert set(ELEMENTS) <= set(names)
    assert len(names) >= len(ELEMENTS) + 5 * len(FAMILIES)
    for name in names:
        cases = {c["name"] for c in found[f"patch.{name}"].details["cases"]}
        assert {"uniform_strain, patch", "turn, patch", "strain_and_turn, straight cell"} <= cases
    order_two = {c["name"] for c in found["patch.tetra10"].details["cases"]}
    assert "quadratic, straight cell" in order_two
    assert "quadratic, straight cell" not in {c["name"] for c in found["patch.tetra"].details["cases"]}


@pytest.mark.practice("a bound that hides an error proves nothing")
def test_the_bounds_are_near_rounding(whole: Installation) -> None:
    for finding in whole.report.findings:
        for case in finding.details["cases"]:
            if finding.id == "refinement":
                continue  # as many digits as are published
            limit = {"1": 1e-11, "1e-6": 1.0, "cells": 0.0, "values": 0.0, "differ": 0.0}[case["unit"]]
            assert case["bound"] <= (1e3 if finding.id == "float32" else limit), (finding.id, case)


# Source: MacNeal and Harder 1985: the plate has area 0.24 x 0.12, the cube volume 1.
@pytest.mark.source("MacNeal and Harder 1985, Finite Elem. Anal. Des. 1, 3-20")
@pytest.mark.parametrize(
    "name", ["triangle", "quad", "quad9", "tetra10", "hexahedron", "hexahedron20", "pyramid"]
)
def test_the_patches_fill_plate_and_cube(name: str) -> None:
    mesh = patch(ELEMENTS[name])
    u = np.zeros_like(mesh.points)
    volumes = unturn.strain(
        unturn.Result(mesh.points, mesh.blocks, {"u": u}), measures=["element_volume"], plane=None
    ).cell_data["element_volume"]
    assert volumes.sum() == pytest.approx(0.0288 if ELEMENTS[name].dim == 2 else 1.0, rel=1e-12)
    assert len(straight_cell(ELEMENTS[name]).blocks[0]) == 1


# --- failures -----------------------------------------------------------------------------------------------------


def test_a_check_that_fails_or_cannot_be_run_is_in_the_record_and_the_record_does_not_pass() -> None:
    # Common practice, no source.
    def broken() -> list[Case]:
        raise OSError("no library\nhere")

    checks = [
        *FEW,
        Check("off", "one is two", SOURCE, lambda: [compared("near", 1.0, 1.0), compared("far", 1.0, 2.0)]),
        Check("nan", "not a number is one", SOURCE, lambda: [compared("nan", np.nan, 1.0)]),
        Check("broken", "it cannot be run", SOURCE, broken),
        Check("empty", "it compares nothing", SOURCE, list),
    ]
    found = check_installation("2026-12-31", checks)
    states = {f.id: f.state for f in found.report.findings}
    assert states == {
        **{c.name: "met" for c in FEW}, "off": "exceeded", "nan": "exceeded", "broken": "error", "empty": "error"
    }  # fmt: skip
    assert found.report.exit_status == 1
    text = record_text(found)
    assert "NOT PASSED: 2 with an error" not in text
    assert "result         NOT PASSED: 2 error, 2 exceeded, 3 met of 7 checks" in text
    assert "1 of 2 comparisons are beyond their bounds, the farthest: far" in text
    assert "could not be run: OSError: no library" in text
    data = record_data(found)
    assert data["passed"] is False
    assert json.loads(json.dumps(data, allow_nan=False)) == data
    assert next(c for c in data["checks"] if c["id"] == "nan")["error"] is None


def test_a_wrong_element_is_seen(monkeypatch: pytest.MonkeyPatch) -> None:
    # Common practice, no source.
    real = installation_meshes.patch_test

    def off(mesh: unturn.Result) -> object:
        test = real(mesh)
        test.errors[2].error[0] = 1e-9  # of a strain of a thousandth
        return test

    monkeypatch.setattr(installation_meshes, "patch_test", off)
    row = ELEMENTS["hexahedron24"]
    installation_meshes._tests.cache_clear()
    checks = [c for c in installation_meshes.mesh_checks() if c.name == f"patch.{row.name}"]
    found = check_installation("2026-12-31", checks)
    installation_meshes._tests.cache_clear()
    assert [f.state for f in found.report.findings] == ["exceeded"]
    assert "uniform_strain" in found.report.findings[0].message


# --- the record ---------------------------------------------------------------------------------------------------


def test_the_record_says_where_it_ran_and_leaves_room_to_sign() -> None:
    # Common practice, no source.
    found = check_installation("2026-12-31", FEW)
    text = record_text(found)
    assert "date           2026-12-31\n" in text
    for package in PACKAGES:
        assert f"{package} " in text
    for role in ("ran by", "checked by", "approved by"):
        assert any(line.startswith(role) and line.count("____") > 2 for line in text.splitlines())
    assert "(practice)" not in text  # no check of these has such a source
    assert all(len(line) <= 126 for line in text.splitlines())
    data = record_data(found)
    assert data["sha256"] in text
    assert [s["role"] for s in data["signatures"]] == ["ran by", "checked by", "approved by"]
    assert not any(s["name"] or s["date"] or s["signature"] for s in data["signatures"])


@pytest.mark.source("Python 3.11: hashlib, json")
def test_the_digest_is_of_the_data_and_of_nothing_else() -> None:
    data = record_data(check_installation("2026-12-31", FEW))
    assert record_data(check_installation("2026-12-31", FEW)) == data
    signed = copy.deepcopy(data)
    signed["signatures"][0]["name"] = "A. Nybody"
    for record in (data, signed):
        rest = {k: v for k, v in record.items() if k not in ("sha256", "signatures")}
        written = json.dumps(rest, sort_keys=True, separators=(",", ":"))
        assert hashlib.sha256(written.encode()).hexdigest() == record["sha256"]
    assert record_data(check_installation("2027-01-01", FEW))["sha256"] != data["sha256"]


@pytest.mark.source("Python 3.11: hashlib")
def test_the_digest_of_the_program_is_over_its_files() -> None:
    home = Path(unturn.errors.__file__).parent
    names = sorted(p.relative_to(home).as_posix() for p in home.rglob("*.py"))
    content = b"".join(n.encode() + b"\0" + (home / n).read_bytes() + b"\0" for n in names)
    assert hashlib.sha256(content).hexdigest() == program_digest()


@pytest.mark.practice("names are what build servers keep results by")
def test_every_check_has_a_name_of_its_own_and_a_source() -> None:
    checks = all_checks()
    assert len({c.name for c in checks}) == len(checks)
    assert all(c.source.text and c.title for c in checks)
