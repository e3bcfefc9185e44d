"""Damaged, dishonest and missing files are refused with a reason, and the interpreter lives on."""

from __future__ import annotations

import os
import re
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest
from vtkmodules.vtkCommonDataModel import vtkUnstructuredGrid

import unturn.io
import vtk_samples as samples
from child_reader import read_in_child
from unturn.errors import InputError
from unturn.io.vtk_result import result_from_vtk

# Common practice, no source: every check of this file is that damage is found, whatever its kind.


def refused(outcome: tuple[str, str], *words: str) -> None:
    kind, text = outcome
    assert kind == "InputError", outcome
    for word in words:
        assert re.search(word, text), text


def write_all(folder: Path) -> dict[str, Path]:
    """One small sound file of every kind."""
    grid = samples.without_odd_names(samples.mixed())
    made = {
        f"{mode}_{compressor}": samples.write_xml(grid, folder / f"{mode}_{compressor}.vtu", mode, compressor)
        for mode, compressor in (
            ("ascii", "None"), ("binary", "None"), ("binary", "ZLib"), ("raw", "None"), ("raw", "LZ4"),
            ("raw", "LZMA"), ("base64", "ZLib"), ("base64", "None"),
        )
    }  # fmt: skip
    for binary in (True, False):
        for version in (42, 51):
            name = f"legacy_{binary}_{version}"
            made[name] = samples.write_legacy(grid, folder / f"{name}.vtk", binary=binary, version=version)
    for name in ("image", "rectilinear", "structured", "poly"):
        data = samples.without_odd_names(getattr(samples, name)())
        made[name] = samples.write_xml(data, folder / f"{name}.vt{name[0]}")
        made[f"{name}_legacy"] = samples.write_legacy(data, folder / f"{name}.vtk")
    made["polyhedra"] = samples.write_xml(samples.polyhedra(), folder / "polyhedra.vtu")
    made["hdf"] = folder / "sound.vtkhdf"
    unturn.io.write(result_from_vtk(grid), made["hdf"])
    return made


@pytest.fixture(scope="module")
def sound(tmp_path_factory: pytest.TempPathFactory) -> dict[str, Path]:
    return write_all(tmp_path_factory.mktemp("sound"))


KINDS = [
    "ascii_None", "binary_None", "binary_ZLib", "raw_None", "raw_LZ4", "raw_LZMA", "base64_ZLib", "base64_None",
    "legacy_True_42", "legacy_True_51", "legacy_False_42", "legacy_False_51", "image", "rectilinear",
    "structured", "poly", "image_legacy", "rectilinear_legacy", "structured_legacy", "poly_legacy", "polyhedra",
    "hdf",
]  # fmt: skip


def test_the_sound_files_are_read(sound: dict[str, Path]) -> None:
    assert sorted(sound) == sorted(KINDS)
    assert {o for o, _ in read_in_child(list(sound.values())).values()} == {"read"}


@pytest.mark.parametrize("kind", KINDS)
def test_a_file_cut_short_anywhere_is_refused(kind: str, sound: dict[str, Path], tmp_path: Path) -> None:
    data = sound[kind].read_bytes()
    end = len(data.rstrip())  # white space at the end may be missing
    if kind.startswith("legacy") or kind.endswith("_legacy"):
        end = data.rfind(b"METADATA") if b"METADATA" in data[-200:] else end
    lengths = sorted(
        {0, 1, 10, *np.linspace(20, end - 1, 90).astype(int).tolist(), end - 1, end - 2, end - 9}
    )
    paths = []
    for n in lengths:
        paths.append(tmp_path / f"{n}{sound[kind].suffix}")
        paths[-1].write_bytes(data[:n])
    unseen: list[int] = []
    for path, outcome in read_in_child(paths).items():
        at = int(path.stem)
        if outcome[0] == "read" and "legacy" in kind:
            # This format says nowhere how long it is: a cut between two sections, or within the last digits
            # of the last number, leaves no trace.
            unseen.append(at)
            continue
        refused(outcome, re.escape(str(path)))
    assert len(unseen) <= 2, unseen


def edit(source: Path, target: Path, old: str, new: str, count: int = 1) -> Path:
    data = source.read_bytes()
    assert old.encode() in data, old
    target.write_bytes(data.replace(old.encode(), new.encode(), count))
    return target


HAND = """<?xml version="1.0"?>
<VTKFile type="UnstructuredGrid" version="1.0" byte_order="LittleEndian">
<UnstructuredGrid><Piece NumberOfPoints="5" NumberOfCells="2">
<PointData><DataArray type="Float64" Name="t" format="ascii">1 2 3 4 5</DataArray></PointData>
<CellData><DataArray type="Float64" Name="c" format="ascii">1 2</DataArray></CellData>
<Points><DataArray type="Float64" NumberOfComponents="3" format="ascii">
0 0 0 1 0 0 0 1 0 0 0 1 1 1 1</DataArray></Points>
<Cells><DataArray type="Int64" Name="connectivity" format="ascii">0 1 2 3 1 2 3 4</DataArray>
<DataArray type="Int64" Name="offsets" format="ascii">4 8</DataArray>
<DataArray type="UInt8" Name="types" format="ascii">10 10</DataArray></Cells>
</Piece></UnstructuredGrid></VTKFile>
"""

TWIN = '<DataArray type="Int8" Name="c" format="ascii">1 2</DataArray>'

WRONG = {
    "out of range": ("1 2 3 4</", "1 2 3 5</", "cell 1 .*node 5.*0 to 4"),
    "half a cell": (">4 8<", ">4.5 8<", "whole number"),
    "far out of range": ("1 2 3 4</", "1 2 3 900000000000</", "cell 1 .*node 900000000000"),
    "negative": (">0 1 2 3 1", ">0 -1 2 3 1", "cell 0 .*node -1"),
    "falling offsets": (">4 8<", ">8 8<", "offsets|has 8 nodes"),
    "falling at the end": (">4 8<", ">8 4<", "connectivity"),
    "negative offset": (">4 8<", ">-4 8<", "offsets"),
    "negative last offset": (">4 8<", ">4 -8<", "last of the offsets is -8"),
    "huge last offset": (">4 8<", ">4 8000000000000<", "connectivity"),
    "no offsets": (">4 8<", "><", "offsets.*0 values; 2"),
    "wrong node count": (">10 10<", ">10 12<", "cell 1 .hexahedron. has 4 nodes; .*8"),
    "quadratic type, linear nodes": (">10 10<", ">24 10<", "cell 0 .tetra10. has 4 nodes.*10"),
    "type out of range": (">10 10<", ">10 300<", "types.*300 is out of the range of uint8"),
    "point array too short": ("1 2 3 4 5<", "1 2 3 4<", "'t' has 4 values; 5"),
    "point array too long": ("1 2 3 4 5<", "1 2 3 4 5 6<", "'t' has 6 values; 5"),
    "cell array too short": (">1 2<", ">1<", "'c' has 1 values; 2"),
    "points too short": ("1 1 1<", "1 1<", "14 values; 15"),
    "not a number": ("1 2 3 4 5<", "1 2 3 x 5<", "'x'.*not a number|not a number"),
    "two numbers in one": ("1 2 3 4 5<", "1 2 3-4 5<", "not a number"),
    "more points than there are": ('Points="5"', 'Points="6"', "needed"),
    "fewer points than there are": ('Points="5"', 'Points="4"', "needed|4 are"),
    "huge counts": ('Cells="2"', 'Cells="99999999999999"', "needed"),
    "counts of no number": ('Cells="2"', 'Cells="two"', "NumberOfCells is 'two'"),
    "negative counts": ('Cells="2"', 'Cells="-2"', "NumberOfCells is '-2'"),
    "no cells": ('Cells="2"', 'Cells="0"', "needed|no cells"),
    "no piece": ("Piece", "Peace", "no Piece", 2),
    "no points": ('Components="3" format="ascii">\n0', 'Components="2" format="ascii">\n0', "not one array of 3"),
    "zero components": ('Components="3"', 'Components="0"', "3 components|0 components"),
    "unknown type": ('"Float64" Name="t"', '"Float63" Name="t"', "Float63"),
    "unknown format": ('Name="t" format="ascii"', 'Name="t" format="ebcdic"', "ebcdic"),
    "appended without data": ('Name="t" format="ascii"', 'Name="t" format="appended" offset="0"', "not there"),
    "two arrays of one name": ("<CellData>", f"<CellData>{TWIN}", "two CellData arrays.*'c'"),
    "another kind inside": ("<UnstructuredGrid>", "<PolyData>", "not complete XML"),
    "unknown compressor": ("byte_order", 'compressor="zip" byte_order', "'zip'"),
    "steps within": ("<UnstructuredGrid>", '<UnstructuredGrid TimeValues="0 1">', "TimeValues"),
    "tag open": ("</Cells>", "<Cells>", "not complete XML"),
    "unknown entity": ("1 2 3 4 5<", "&boom;<", "not complete XML"),
}  # fmt: skip


@pytest.fixture(scope="module")
def wrong(tmp_path_factory: pytest.TempPathFactory) -> dict[str, tuple[str, str]]:
    folder = tmp_path_factory.mktemp("wrong")
    base = folder / "base.vtu"
    base.write_text(HAND)
    paths = {name: edit(base, folder / f"{name}.vtu", *WRONG[name][:2], *WRONG[name][3:]) for name in WRONG}
    outcomes = read_in_child([base, *paths.values()])
    assert outcomes[base][0] == "read"
    return {name: outcomes[path] for name, path in paths.items()}


@pytest.mark.parametrize("name", WRONG)
def test_what_contradicts_itself_is_refused_with_its_place(
    name: str, wrong: dict[str, tuple[str, str]]
) -> None:
    refused(wrong[name], WRONG[name][2])


def bomb() -> str:
    lines = ['<!ENTITY a0 "0 ">'] + [f'<!ENTITY a{k} "{f"&a{k - 1};" * 10}">' for k in range(1, 10)]
    return (
        "<?xml version='1.0'?><!DOCTYPE VTKFile ["
        + "".join(lines)
        + "]>"
        + HAND[21:].replace("1 2 3 4 5", "&a9;")
    )


def test_entity_bombs_garbage_and_foreign_files(tmp_path: Path) -> None:
    rng = np.random.default_rng(0)
    made = {
        "bomb.vtu": bomb().encode(),
        "external.vtu": HAND.replace(
            "?>", '?><!DOCTYPE x [<!ENTITY e SYSTEM "file:///etc/hostname">]>', 1
        ).encode(),
        "garbage.vtu": rng.bytes(5000),
        "garbage.vtk": rng.bytes(5000),
        "garbage.vtkhdf": rng.bytes(5000),
        "zeros.vtu": bytes(5000),
        "text.vtk": b"these are no results\n" * 20,
        "page.vtu": b"<html><body>404</body></html>",
        "header.vtu": b'<VTKFile type="UnstructuredGrid">',
        "other.vtu": b'<VTKFile type="HyperTreeGrid"><HyperTreeGrid/></VTKFile>',
        "hdf.vtkhdf": b"\x89HDF\r\n\x1a\n" + rng.bytes(500),
        "unknown.xyz": b"1 2 3",
        "nothing.vtu": b"",
    }
    for name, data in made.items():
        (tmp_path / name).write_bytes(data)
    outcomes = read_in_child([tmp_path / name for name in made])
    for name in made:
        refused(outcomes[tmp_path / name], re.escape(name))
    refused(outcomes[tmp_path / "bomb.vtu"], "document type")
    refused(outcomes[tmp_path / "external.vtu"], "document type")
    refused(outcomes[tmp_path / "nothing.vtu"], "empty")
    refused(outcomes[tmp_path / "unknown.xyz"], r"\.xyz.*VTU")


def test_places_that_are_no_file(tmp_path: Path) -> None:
    (tmp_path / "folder.vtu").mkdir()
    os.mkfifo(tmp_path / "pipe.vtu")
    names = ["folder.vtu", "pipe.vtu", "missing.vtu"]
    outcomes = read_in_child([tmp_path / n for n in names], timeout=30)
    for name, word in zip(names, ("folder", "regular", "no such file"), strict=True):
        refused(outcomes[tmp_path / name], word)


def test_a_file_without_permission(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = tmp_path / "in.vtu"
    path.write_text(HAND)

    def denied(self: Path, *_: Any) -> Any:
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr(Path, "open", denied)  # root may read everything, so the refusal is played
    with pytest.raises(InputError, match=r"in\.vtu.*Permission denied"):
        unturn.io.read(path)


def test_a_mesh_without_cells(tmp_path: Path) -> None:
    empty = vtkUnstructuredGrid()
    empty.SetPoints(samples.corners())
    bare = vtkUnstructuredGrid()
    paths = [
        samples.write_xml(empty, tmp_path / "points.vtu"),
        samples.write_xml(bare, tmp_path / "bare.vtu"),
        samples.write_legacy(empty, tmp_path / "points.vtk"),
    ]
    for outcome in read_in_child(paths).values():
        refused(outcome, "no cells")


OFFSETS = b"\x04\x00\x00\x00\x00\x00\x00\x00\x08\x00"


def test_wrong_sizes_in_raw_data(tmp_path: Path) -> None:
    grid = samples.tetrahedra(2)
    path = samples.write_xml(samples.without_odd_names(grid), tmp_path / "in.vtu", HeaderType=64)
    data = path.read_bytes()
    spot = data.index(OFFSETS)
    paths = []
    for name, new in {
        "last offset huge": (spot + 8, (2**62).to_bytes(8, "little")),
        "last offset negative": (spot + 8, (-1).to_bytes(8, "little", signed=True)),
        "first offset huge": (spot, (2**40).to_bytes(8, "little")),
        "length huge": (spot - 8, (2**60).to_bytes(8, "little")),
        "length zero": (spot - 8, bytes(8)),
    }.items():
        changed = bytearray(data)
        changed[new[0] : new[0] + 8] = new[1]
        paths.append(tmp_path / f"{name}.vtu")
        paths[-1].write_bytes(changed)
    for outcome in read_in_child(paths).values():
        refused(outcome, "offsets")


def test_grids_that_would_not_fit_in_memory(tmp_path: Path) -> None:
    path = samples.write_xml(samples.without_odd_names(samples.image()), tmp_path / "in.vti")
    text = path.read_bytes()
    huge = tmp_path / "huge.vti"
    huge.write_bytes(text.replace(b'Extent="1 4 0 2 0 1"', b'Extent="0 99999 0 99999 0 9"'))
    bare = tmp_path / "bare.vti"
    bare.write_text(
        '<VTKFile type="ImageData" version="1.0"><ImageData WholeExtent="0 999 0 999 0 999" Origin="0 0 0" '
        'Spacing="1 1 1"><Piece Extent="0 999 0 999 0 999"/></ImageData></VTKFile>'
    )
    legacy = tmp_path / "huge.vtk"
    legacy.write_text(
        "# vtk DataFile Version 3.0\nx\nASCII\nDATASET STRUCTURED_POINTS\nDIMENSIONS 99999 99999 99\n"
        "SPACING 1 1 1\nORIGIN 0 0 0\n"
    )
    counts = tmp_path / "counts.vtk"
    counts.write_text(
        "# vtk DataFile Version 3.0\nx\nASCII\nDATASET UNSTRUCTURED_GRID\nPOINTS 99999999999 float\n0 0 0\n"
    )
    for outcome in read_in_child([huge, bare, legacy, counts]).values():
        refused(outcome)


def test_faces_of_polyhedra_that_do_not_exist(tmp_path: Path) -> None:
    path = samples.write_xml(samples.polyhedra(), tmp_path / "in.vtu", "ascii")
    text = path.read_text()
    head, tail = text.split('Name="face_connectivity"')
    made = {
        "node": head + 'Name="face_connectivity"' + tail.replace(" 13 ", " 9999999999999 ", 1),
        "negative": head + 'Name="face_connectivity"' + tail.replace(" 13 ", " -13 ", 1),
        "face": text.replace("6 7 8 9 10 11", "6 7 8 9 10 36028797018963973"),
        "missing": text.replace("polyhedron_offsets", "polyhedron_offset"),
    }
    for name, damaged in made.items():
        assert damaged != text
        (tmp_path / f"{name}.vtu").write_text(damaged)
    for outcome in read_in_child([tmp_path / f"{name}.vtu" for name in made]).values():
        refused(outcome, "face|polyhedron")


LEGACY = (
    "# vtk DataFile Version 3.0\nby hand\nASCII\nDATASET UNSTRUCTURED_GRID\nPOINTS 4 float\n"
    "0 0 0 1 0 0 0 1 0 0 0 1\nCELLS 1 5\n4 0 1 2 3\nCELL_TYPES 1\n10\nPOINT_DATA 4\n"
    "SCALARS t float 1\nLOOKUP_TABLE default\n1 2 3 4\n"
)
WRONG_LEGACY = {
    "out of range": ("4 0 1 2 3", "4 0 1 2 4", "node 4"),
    "negative": ("4 0 1 2 3", "4 0 1 -2 3", "node -2"),
    "count too big": ("4 0 1 2 3", "9 0 1 2 3", "cell"),
    "count negative": ("4 0 1 2 3", "-4 0 1 2 3", "cell 0"),
    "size wrong": ("CELLS 1 5", "CELLS 1 4", "."),
    "type wrong": ("\n10\n", "\n12\n", "hexahedron"),
    "type out of range": ("\n10\n", "\n1000\n", "between 0 and 255"),
    "array too short": ("1 2 3 4\n", "1 2 3\n", "4 values"),
    "keyword unknown": ("POINT_DATA", "POINT_DATE", "POINT_DATE"),
    "wrong number of points": ("POINT_DATA 4", "POINT_DATA 3", "."),
    "more types than cells": ("CELL_TYPES 1\n10", "CELL_TYPES 2\n10 10", "."),
    "data set unknown": ("UNSTRUCTURED_GRID", "HYPERGRID", "HYPERGRID"),
    "not a number": ("0 0 0 1 0 0", "0 0 0 1 a 0", "not a number"),
    "newer version, older layout": ("Version 3.0", "Version 5.1", "laid out"),
    "no version": ("Version 3.0", "Version", "Version"),
}


@pytest.fixture(scope="module")
def wrong_legacy(tmp_path_factory: pytest.TempPathFactory) -> dict[str, tuple[str, str]]:
    folder = tmp_path_factory.mktemp("wrong_legacy")
    base = folder / "base.vtk"
    base.write_text(LEGACY)
    paths = {name: edit(base, folder / f"{name}.vtk", *WRONG_LEGACY[name][:2]) for name in WRONG_LEGACY}
    outcomes = read_in_child([base, *paths.values()])
    assert outcomes[base][0] == "read"
    return {name: outcomes[path] for name, path in paths.items()}


@pytest.mark.parametrize("name", WRONG_LEGACY)
def test_a_legacy_file_that_contradicts_itself(name: str, wrong_legacy: dict[str, tuple[str, str]]) -> None:
    refused(wrong_legacy[name], WRONG_LEGACY[name][2])


def test_wrong_vtkhdf(sound: dict[str, Path], tmp_path: Path) -> None:
    data = sound["hdf"].read_bytes()

    def changed(name: str, change: Any) -> Path:
        path = tmp_path / f"{name}.vtkhdf"
        path.write_bytes(data)
        with h5py.File(path, "a") as file:
            change(file["VTKHDF"])
        return path

    def put(key: str, index: int, value: int) -> Any:
        def change(root: Any) -> None:
            root[key][index] = value

        return change

    def unwritten(root: Any) -> None:
        del root["Points"]
        root.create_dataset("Points", (27, 3), "f8", chunks=(9, 3))

    def retype(root: Any) -> None:
        root.attrs["Type"] = np.bytes_("OverlappingAMR")

    made = [
        (changed("range", put("Connectivity", 3, 99)), "node 99"),
        (changed("negative", put("Connectivity", 3, -1)), "node -1"),
        (changed("offsets", put("Offsets", 2, 40)), "offsets"),
        (changed("points", put("NumberOfPoints", 0, 10**12)), "rows"),
        (changed("cells", put("NumberOfCells", 0, -3)), "."),
        (changed("type", put("Types", 0, 12)), "hexahedron"),
        (changed("unwritten", unwritten), "never written"),
        (changed("amr", retype), "OverlappingAMR"),
        (changed("gone", lambda root: root.pop("Offsets")), "Offsets"),
    ]
    outcomes = read_in_child([path for path, _ in made])
    for path, word in made:
        refused(outcomes[path], word)
