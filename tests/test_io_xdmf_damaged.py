"""Damaged, incomplete and hostile XDMF files are refused with a sentence that says what and where."""

from __future__ import annotations

import random
import zlib
from pathlib import Path

import h5py
import numpy as np
import pytest

from unturn.errors import InputError, UsageError
from unturn.io import xdmf
from xdmf_samples import TRIANGLES, grid, index, node_array, one_cell, temporal


def refused(path: Path, step: int = 0) -> str:
    """Return the sentence with which a file is refused; it names the file."""
    with pytest.raises(InputError) as caught:
        xdmf.open_file(path).read(step)
    text = str(caught.value)
    assert text.startswith(str(path))
    assert text.endswith(".")
    return text


# The index

WRONG_INDEX = {
    "empty": ("", "is not complete XML"),
    "other": ("<VTKFile></VTKFile>", "line 1: the outermost element is <VTKFile>"),
    "cut short": ("<Xdmf><Domain><Grid>", "is not complete XML"),
    "binary": ("\x00\x01\x02", "is not complete XML"),
    "version": ('<Xdmf Version="4.0"><Domain/></Xdmf>', "XDMF version '4.0' is not known"),
    "no domain": ("<Xdmf></Xdmf>", "0 Domains; one is expected"),
    "two domains": ("<Xdmf><Domain/><Domain/></Xdmf>", "2 Domains"),
    "no grid": ("<Xdmf><Domain/></Xdmf>", "the Domain holds no Grid"),
    "outside entity": (
        '<!DOCTYPE Xdmf [<!ENTITY a SYSTEM "file:///etc/hostname">]><Xdmf><Domain>&a;</Domain></Xdmf>',
        "the entity 'a' is not a short text of this file",
    ),
    "parameter entity": (
        '<!DOCTYPE Xdmf [<!ENTITY % a SYSTEM "file:///etc/hostname"> %a;]><Xdmf><Domain/></Xdmf>',
        "the entity 'a' is not a short text",
    ),
    "entity bomb": (
        '<!DOCTYPE Xdmf [<!ENTITY a "aaaa"><!ENTITY b "&a;&a;&a;&a;">]><Xdmf><Domain>&b;</Domain></Xdmf>',
        "the entity 'b' is not a short text",
    ),
    "long entity": (
        f'<!DOCTYPE Xdmf [<!ENTITY a "{"a" * 300}">]><Xdmf><Domain>&a;</Domain></Xdmf>',
        "the entity 'a' is not a short text",
    ),
    "undeclared entity": (
        '<!DOCTYPE Xdmf SYSTEM "Xdmf.dtd"><Xdmf><Domain>&heavy;</Domain></Xdmf>',
        "the entity 'heavy' is not declared",
    ),
    "nested": ("<Xdmf>" * 100 + "</Xdmf>" * 100, "elements nested 65 deep"),
}


@pytest.mark.parametrize("case", WRONG_INDEX)
def test_an_index_that_cannot_be_used(case: str, tmp_path: Path) -> None:
    content, expected = WRONG_INDEX[case]
    (tmp_path / "a.xdmf").write_text(content)
    assert expected in refused(tmp_path / "a.xdmf")


def test_a_missing_index(tmp_path: Path) -> None:
    assert "cannot be opened: No such file" in refused(tmp_path / "a.xdmf")


def test_a_step_that_is_not_there(tmp_path: Path) -> None:
    with pytest.raises(UsageError, match="has steps 0 to 0; step 1 was asked for"):
        xdmf.open_file(index(tmp_path, grid())).read(1)


# Grids, includes, references

WRONG_GRIDS = {
    "no topology": (grid(mesh=TRIANGLES[TRIANGLES.index("<Geometry") :]), "the Grid 'g' has no Topology"),
    "no geometry": (grid(mesh=TRIANGLES.split("<Geometry")[0]), "the Grid 'g' has no Geometry"),
    "two topologies": (grid(TRIANGLES), "a second <Topology> in one <Grid>"),
    "unknown element": (grid("<Map/>"), "<Map> in a Grid is not read"),
    "subset": ('<Grid Name="s" GridType="SubSet"/>', "the Grid 's' is GridType='SubSet'"),
    "empty series": (temporal(), "the series 'steps' holds no step"),
    "series in a series": (temporal(temporal(grid())), "is a series inside a step"),
    "empty step": (
        temporal('<Grid GridType="Collection" CollectionType="Spatial"/>'),
        "step 0 of the series holds no Grid",
    ),
    "one time twice": (
        temporal(grid('<Time Value="1"/>'), grid('<Time Value="1"/>')),
        "two steps of one series have the time 1.0",
    ),
    "no number for a time": (grid('<Time Value="soon"/>'), "the time 'soon' is not a number"),
    "nan for a time": (grid('<Time Value="nan"/>'), "the time 'nan' is not a number"),
    "range": (temporal('<Time TimeType="Range" Value="0 1"/>', grid()), "TimeType='Range' for a series"),
    "too few times": (
        temporal('<Time TimeType="List"><DataItem Dimensions="1">1</DataItem></Time>', grid(), grid()),
        "the series has 2 steps and 1 usable times",
    ),
    "times side by side": (
        grid('<Time Value="1"/>') + grid('<Time Value="2"/>'),
        "grids of different times (1.0, 2.0 ...)",
    ),
    "include of nothing": (
        '<xi:include xpointer="xpointer(//Grid[@Name=&quot;no&quot;])"/>',
        "leads to no element",
    ),
    "include of itself": (
        '<Grid GridType="Tree"><xi:include xpointer="xpointer(/Xdmf/Domain/Grid)"/></Grid>',
        "Grids nested more than 16 deep",
    ),
    "include of an include": (
        '<xi:include xpointer="xpointer(/Xdmf/Domain/*)"/>',
        "the includes go round in a circle",
    ),
    "include from afar": (
        '<xi:include href="http://example.org/a.xdmf" xpointer="xpointer(/Xdmf)"/>',
        "nothing is fetched",
    ),
    "include of a missing file": ('<xi:include href="b.xdmf"/>', "the included file 'b.xdmf' is missing"),
    "pointer not understood": ('<xi:include xpointer="xpointer(id(5))"/>', "is not understood"),
    "condition not understood": (
        '<xi:include xpointer="xpointer(/Xdmf[last()]/Domain)"/>',
        "has a condition that is not understood: [last()]",
    ),
    "reference to nothing": (
        grid('<Attribute Name="a"><DataItem Reference="XML">/Xdmf/No</DataItem></Attribute>'),
        "the reference '/Xdmf/No' leads to no element",
    ),
    "reference to another kind": (
        grid('<Attribute Name="a"><DataItem Reference="XML">/Xdmf/Domain</DataItem></Attribute>'),
        "leads to a <Domain>, not a <DataItem>",
    ),
    "reference to itself": (
        '<DataItem Reference="XML">/Xdmf/Domain/DataItem</DataItem>'
        + grid('<Attribute Name="a"><DataItem Reference="/Xdmf/Domain/DataItem"/></Attribute>'),
        "the references go round in a circle",
    ),
}


@pytest.mark.parametrize("case", WRONG_GRIDS)
def test_grids_includes_and_references_that_are_wrong(case: str, tmp_path: Path) -> None:
    content, expected = WRONG_GRIDS[case]
    assert expected in refused(index(tmp_path, content))


def test_includes_that_multiply_each_other_end(tmp_path: Path) -> None:
    pairs = [
        f'<Grid Name="g{k}" GridType="Tree">'
        + f"<xi:include xpointer=\"xpointer(//Grid[@Name='g{k + 1}'])\"/>" * 60
        + "</Grid>"
        for k in range(8)
    ]
    path = index(tmp_path, *pairs, grid(name="g8"))
    assert "more than 200000" in refused(path)


def test_includes_of_includes_end(tmp_path: Path) -> None:
    include = '<xi:include xpointer="xpointer(/Xdmf/Domain/Grid[@Name=&quot;g{}&quot;]/*)"/>'
    grids = [f'<Grid Name="g{k}" GridType="Tree">{include.format(k + 1) * 60}</Grid>' for k in range(8)]
    assert "the includes multiply each other" in refused(index(tmp_path, *grids, grid(name="g8")))


def test_ten_thousand_searches_of_a_large_index_end(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("unturn.io.xdmf_tree.MAX_SEARCHED", 20_000)
    steps = [
        f'<Grid><xi:include xpointer="xpointer(//Grid[@Name=&quot;{k}&quot;]/*)"/></Grid>' for k in range(99)
    ]
    meshes = [grid(name=str(k)) for k in range(99)]
    assert "too many different paths" in refused(index(tmp_path, *meshes, temporal(*steps)))


# Topology and geometry

WRONG_MESHES = {
    "unknown cells": (('"Triangle"', '"Triangle_15"'), "cells of type 'Triangle_15' are not read"),
    "no cells named": ((' TopologyType="Triangle"', ""), "cells of type '' are not read"),
    "order": (("<Topology", '<Topology Order="2 1 0"'), "an Order of its own"),
    "number of cells": (('Elements="2"', 'Elements="3"'), "6 node numbers of 3 a cell for 3 cells"),
    "nodes per cell": (('Element="3"', 'Element="4"'), "Triangle with 4 nodes a cell"),
    "rows": (('"2 3"', '"3 2"'), "the data has rows of 2"),
    "node too large": (
        ("1 3 2<", "1 4 2<"),
        "cell 1 (triangle) refers to node 4, but the mesh has nodes 0 to 3",
    ),
    "node below zero": (("1 3 2<", "1 -1 2<"), "cell 1 (triangle) refers to node -1"),
    "float nodes": (('NumberType="Int"', ""), "the connectivity holds float32 numbers"),
    "base offset": (("<Topology", '<Topology BaseOffset="one"'), "BaseOffset='one' is not a whole number"),
    "too few points": (
        ("0 0 1 0 0 1 1 1", "0 0 1 0 0 1 1"),
        "Dimensions says 4 x 2, the text holds 7 numbers",
    ),
    "geometry": (('"XY"', '"POLAR"'), "a Geometry of type 'POLAR' is not read"),
    "point rows": (('"XY"', '"XYZ"'), "the points are stored in the shape (4, 2)"),
    "no points": (('"4 2" Precision="8" Format="XML">0 0 1 0 0 1 1 1', '"0 2">'), "nodes 0 to -1"),
    "polyvertex of two": (('"Triangle"', '"Polyvertex"'), "Polyvertex with 3 nodes a cell is not read"),
    "number of nodes": (('Element="3"', 'Element="x"'), "NodesPerElement='x'"),
}


@pytest.mark.parametrize("case", WRONG_MESHES)
def test_meshes_that_are_wrong(case: str, tmp_path: Path) -> None:
    (old, new), expected = WRONG_MESHES[case]
    assert old in TRIANGLES
    assert expected in refused(index(tmp_path, grid(mesh=TRIANGLES.replace(old, new))))


@pytest.mark.parametrize(
    ("stream", "expected"),
    [
        ("4 0 1 2 4 1 3", "it ends within the triangle that begins at number 4"),
        ("4 0 1 2 99 1 3 2", "number 4 is 99, which is no cell type that is read"),
        ("4 0 1 2 -4 1 3 2", "number 4 is -4"),
        ("4 0 1 2", "it holds 1 cells, NumberOfElements says 2"),
        ("2 3 0 1 2 4 0 1 2", "number 0 begins a line of 3 nodes"),
        ("3 -1 0 1 2 4 0 1 2", "number 0 begins a polygon of -1 nodes"),
        ("3 900000000000 0 1 2", "it ends within the polygon"),
        ("3", "number 0 begins a polygon of 0 nodes"),
        ("16 4 3 0 1 2 3 0 1 3", "number 0 is 16"),
    ],
)
def test_mixed_cells_that_cannot_be_followed(stream: str, expected: str, tmp_path: Path) -> None:
    mesh = TRIANGLES.replace('"Triangle"', '"Mixed"').replace("0 1 2 1 3 2", stream)
    mesh = mesh.replace('"2 3" NumberType="Int"', f'"{len(stream.split())}" NumberType="Int" Precision="8"')
    assert expected in refused(index(tmp_path, grid(mesh=mesh)))


@pytest.mark.parametrize(
    ("topology", "geometry", "expected"),
    [
        ('"3DCoRectMesh" Dimensions="9999 9999 9999"', "ORIGIN_DXDYDZ", "of more than 67108864 points"),
        ('"3DSMesh" Dimensions="2 2"', "XYZ", "3 numbers of at least 2 are expected"),
        ('"3DSMesh" Dimensions="1 2 2"', "XYZ", "3 numbers of at least 2 are expected"),
        ('"3DSMesh"', "XYZ", "of no points is not read"),
        ('"4DMesh" Dimensions="2 2 2"', "XYZ", "is not read"),
        ('"3DRectMesh" Dimensions="2 2 2"', "VXVYVZ", "coordinates along the axes: []"),
        ('"3DCoRectMesh" Dimensions="2 2 2"', "ORIGIN_DXDYDZ", "an origin and a spacing of 3 numbers"),
    ],
)
def test_structured_meshes_that_are_wrong(
    topology: str, geometry: str, expected: str, tmp_path: Path
) -> None:
    mesh = f'<Topology TopologyType={topology}/><Geometry GeometryType="{geometry}"/>'
    assert expected in refused(index(tmp_path, grid(mesh=mesh)))


# Arrays and their numbers

ARRAY = node_array("u", "1 2 3 4")
WRONG_ARRAYS = {
    "short": (("1 2 3 4", "1 2 3"), "Dimensions says 4, the text holds 3 numbers"),
    "long": (("1 2 3 4", "1 2 3 4 5"), "Dimensions says 4, the text holds 5 numbers"),
    "rows": (('"4"', '"2 3"'), "the array 'u' has the shape (2, 3); the mesh has 4 nodes", "1 2 3 4 5 6"),
    "word": (("1 2 3 4", "1 2 x 4"), "number 2 is 'x'"),
    "fortran": (("1 2 3 4", "1 2 3D0 4"), "number 2 is '3D0'"),
    "comma": (("1 2 3 4", "1,2,3,4"), "number 0 is '1,2,3,4'"),
    "fraction": ((' Precision="8"', ' NumberType="Int"'), "number 1 is '2.5'", "1 2.5 3 4"),
    "too large": ((' Precision="8"', ' NumberType="Int" Precision="1"'), "fit into 8 bits", "1 200 3 4"),
    "negative": ((' Precision="8"', ' NumberType="UInt"'), "a negative number where", "1 -2 3 4"),
    "huge": (
        (' Precision="8"', ' NumberType="Int" Precision="8"'),
        "too large for 64 bits",
        f"{2**70} 2 3 4",
    ),
    "number type": ((' Precision="8"', ' NumberType="Real"'), "NumberType='Real' with Precision='4' is no"),
    "precision": ((' Precision="8"', ' Precision="16"'), "NumberType='Float' with Precision='16' is no"),
    "no dimensions": (('Dimensions="4"', ""), "a DataItem without Dimensions"),
    "bad dimensions": (('Dimensions="4"', 'Dimensions="-4"'), "Dimensions='-4' is not a list"),
    "huge dimensions": (('Dimensions="4"', 'Dimensions="99999999999999"'), "Dimensions says 99999999999999"),
    "format": (('"XML"', '"TIFF"'), "a DataItem of format 'TIFF' is not read"),
    "item type": (("<DataItem", '<DataItem ItemType="Tree"'), "a DataItem of type 'Tree' is not read"),
    "no item": (
        (ARRAY[ARRAY.index("<DataItem") : -len("</Attribute>")], ""),
        "<Attribute 'u'> has 0 DataItems",
    ),
    "no name": ((' Name="u"', ""), "an Attribute without a name"),
    "center": (('"Node"', '"Corner"'), "the array 'u' has Center='Corner'"),
    "tensor": (('"Scalar"', '"Tensor6"'), "the array 'u' is a Tensor6 of () components"),
}


@pytest.mark.parametrize("case", WRONG_ARRAYS)
def test_arrays_that_are_wrong(case: str, tmp_path: Path) -> None:
    (old, new), expected, *numbers = WRONG_ARRAYS[case]
    assert old in ARRAY
    array = ARRAY.replace(old, new).replace("1 2 3 4", numbers[0] if numbers else "1 2 3 4")
    text = refused(index(tmp_path, grid(array)))
    assert expected in text
    assert "line 8:" in text


def test_two_arrays_of_one_name(tmp_path: Path) -> None:
    assert "two point arrays are called 'u'" in refused(index(tmp_path, grid(ARRAY, ARRAY)))


@pytest.mark.parametrize(
    ("members", "expected"), [("0 2", "names cell 2; the mesh has cells 0 to 1"), ("-1 0", "names cell")]
)
def test_sets_of_cells_that_do_not_exist(members: str, expected: str, tmp_path: Path) -> None:
    item = f'<DataItem Dimensions="2" NumberType="Int">{members}</DataItem>'
    assert expected in refused(index(tmp_path, grid(f'<Set Name="s" SetType="Cell">{item}</Set>')))


SELECTION = '<DataItem Dimensions="3 1" NumberType="Int">{}</DataItem>'
SOURCE = '<DataItem Dimensions="8" Precision="8">0 1 2 3 4 5 6 7</DataItem>'


@pytest.mark.parametrize(
    ("item", "expected"),
    [
        (
            f'ItemType="HyperSlab">{SELECTION.format("0 1 9")}{SOURCE}',
            "does not lie inside an axis of length 8",
        ),
        (f'ItemType="HyperSlab">{SELECTION.format("-1 1 4")}{SOURCE}', "from -1 by 1, 4 times"),
        (f'ItemType="HyperSlab">{SELECTION.format("0 0 4")}{SOURCE}', "from 0 by 0"),
        (
            f'ItemType="HyperSlab">{SELECTION.format("0 1 3")}{SOURCE}',
            "Dimensions says 4, the selection holds 3",
        ),
        (f'ItemType="HyperSlab">{SOURCE}', "a HyperSlab DataItem needs 2 DataItems inside and has 1"),
        (f'ItemType="HyperSlab">{SOURCE}{SOURCE}', "a HyperSlab needs whole numbers"),
        (f'ItemType="Function" Function="SQRT($0)">{SOURCE}', "the function 'SQRT($0)' is not read"),
        (f'ItemType="Function" Function="JOIN($0,$1)">{SOURCE}', "needs 2 DataItems inside and has 1"),
        (
            f'ItemType="Function" Function="JOIN($0,$1)">{SOURCE}{SELECTION.format("1 2 3")}',
            "different shapes",
        ),
        (f'ItemType="Coordinates">{SELECTION.format("1 2 8")}{SOURCE}', "a coordinate lies outside"),
        (f'ItemType="Coordinates">{SELECTION.format("1 2 -1")}{SOURCE}', "a coordinate lies outside"),
    ],
)
def test_items_made_of_items_that_are_wrong(item: str, expected: str, tmp_path: Path) -> None:
    array = f'<Attribute Name="u"><DataItem Dimensions="4" {item}</DataItem></Attribute>'
    assert expected in refused(index(tmp_path, grid(array)))


def test_a_data_item_inside_itself(tmp_path: Path) -> None:
    item = (
        '<DataItem Name="a" Dimensions="4" ItemType="Function" Function="JOIN($0)">'
        '<DataItem Reference="XML">//DataItem[@Name="a"]</DataItem></DataItem>'
    )
    array = f'<Attribute Name="u">{item}</Attribute>'
    assert "go round in a circle" in refused(index(tmp_path, grid(array)))


# HDF5 and binary files


def hdf(text: str, dims: str = "4") -> str:
    return f'<Attribute Name="u"><DataItem Dimensions="{dims}" Format="HDF">{text}</DataItem></Attribute>'


def test_a_missing_hdf5_file_is_named_with_the_place_where_it_was_looked_for(tmp_path: Path) -> None:
    text = refused(index(tmp_path, grid(hdf("heavy/a.h5:/u"))))
    assert f"the HDF5 file 'heavy/a.h5' is missing; it was looked for at {tmp_path}/heavy/a.h5." in text


@pytest.mark.parametrize("text", ["a.h5", "a.h5:", ":/u", "", "a.h5:/u|0|1|4", "a\nb.h5:/u"])
def test_a_text_that_names_no_dataset(text: str, tmp_path: Path) -> None:
    assert "the text " in refused(index(tmp_path, grid(hdf(text))))


def test_hdf5_files_that_cannot_be_used(tmp_path: Path) -> None:
    (tmp_path / "other.h5").write_bytes(np.arange(4.0).tobytes())
    with h5py.File(tmp_path / "u.h5", "w") as file:
        file["u"] = np.arange(4.0)
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file["group/u"] = np.arange(4.0)
        file["words"] = np.array([b"a", b"b", b"c", b"d"])
        file["complex"] = np.ones(4, complex)
        file["nothing"] = h5py.Empty("f8")
        file.create_dataset("unwritten", (4,), "f8")
        file.create_dataset("bomb", (2**40,), "f4", chunks=(2**20,), compression="gzip")[0] = 1
        file.create_dataset("raw", (4,), "f8", external=[("u.h5", 0, 32)])
        file["linked"] = h5py.ExternalLink("u.h5", "/u")
        file["loop"] = h5py.SoftLink("/loop")
        layout = h5py.VirtualLayout((4,), "f8")
        layout[:] = h5py.VirtualSource("u.h5", "u", (4,))
        file.create_virtual_dataset("virtual", layout)
    expected = {
        "other.h5:/u": "cannot be opened as HDF5",
        "a.h5:/no": "has no dataset '/no' ('no' is missing)",
        "a.h5:/group": "is a group, not a dataset",
        "a.h5:/group/u/more": "('more' is missing)",
        "a.h5:/words": "not numbers of 1 to 8 bytes",
        "a.h5:/complex": "not numbers of 1 to 8 bytes",
        "a.h5:/nothing": "not numbers of 1 to 8 bytes",
        "a.h5:/unwritten": "was never written",
        "a.h5:/bomb": "was never written",
        "a.h5:/raw": "keeps its numbers in another file",
        "a.h5:/linked": "is a link to another file",
        "a.h5:/virtual": "keeps its numbers in another file",
        "a.h5:/loop": "a.h5",
    }
    for text, sentence in expected.items():
        assert sentence in refused(index(tmp_path, grid(hdf(text)))), text


@pytest.mark.parametrize(("shape", "dims"), [((3,), "4"), ((5,), "4"), ((3, 4), "4 3"), ((12,), "4 4")])
def test_hdf5_of_another_size_than_the_index_says(shape: tuple[int, ...], dims: str, tmp_path: Path) -> None:
    with h5py.File(tmp_path / "a.h5", "w") as file:
        file["u"] = np.ones(shape)
    text = refused(index(tmp_path, grid(hdf("a.h5:/u", dims))))
    assert ("the HDF5 dataset holds" in text) or ("has the shape" in text)


def test_an_hdf5_file_that_is_being_written(tmp_path: Path) -> None:
    path = index(tmp_path, grid(hdf("a.h5:/u")))
    with h5py.File(tmp_path / "a.h5", "w", libver="latest", locking=True) as file:
        file["u"] = np.arange(4.0)
        file.flush()
        text = refused(path)
    assert "a.h5" in text
    assert "being written" in text
    assert xdmf.open_file(path).read().point_data["u"].tolist() == [0, 1, 2, 3]


def test_the_hdf5_file_is_not_touched(tmp_path: Path) -> None:
    xdmf.write(one_cell("tetra"), tmp_path / "a.xdmf")
    heavy = tmp_path / "a.xdmf.h5"
    heavy.chmod(0o444)
    before = heavy.read_bytes(), heavy.stat().st_mtime_ns
    xdmf.open_file(tmp_path / "a.xdmf").read()
    assert (heavy.read_bytes(), heavy.stat().st_mtime_ns) == before


@pytest.mark.parametrize(
    ("attributes", "expected"),
    [
        ("", "a.bin has 32 bytes; 32 bytes from byte 1 on"),
        ('Endian="Middle"', "Endian='middle'"),
        ('Compression="LZ4"', "Compression='lz4'"),
        ('Compression="Zlib"', "the zlib data cannot be unpacked"),
        ('Compression="BZip2"', "the bzip2 data cannot be unpacked"),
    ],
)
def test_binary_files_that_cannot_be_used(attributes: str, expected: str, tmp_path: Path) -> None:
    (tmp_path / "a.bin").write_bytes(np.arange(4.0).tobytes())
    item = f'<DataItem Dimensions="4" Precision="8" Format="Binary" Seek="1" {attributes}>a.bin</DataItem>'
    assert expected in refused(index(tmp_path, grid(f'<Attribute Name="u">{item}</Attribute>')))


@pytest.mark.parametrize("count", [3, 5, 10**6])
def test_packed_binary_of_another_size(count: int, tmp_path: Path) -> None:
    (tmp_path / "a.bin").write_bytes(zlib.compress(np.zeros(count).tobytes()))
    item = '<DataItem Dimensions="4" Precision="8" Format="Binary" Compression="Zlib">a.bin</DataItem>'
    assert "32 were asked for" in refused(index(tmp_path, grid(f'<Attribute Name="u">{item}</Attribute>')))


def test_a_device_is_not_read(tmp_path: Path) -> None:
    item = '<DataItem Dimensions="4" Precision="8" Format="Binary">/dev/zero</DataItem>'
    assert "is missing" in refused(index(tmp_path, grid(f'<Attribute Name="u">{item}</Attribute>')))


# Any bytes at all


def sample(folder: Path) -> Path:
    """Write a file that uses much of XDMF."""
    with h5py.File(folder / "a.h5", "w") as file:
        file["u"] = np.arange(8.0).reshape(2, 4)
    slab = '<DataItem Dimensions="3 2" NumberType="Int">1 0 1 1 1 4</DataItem>'
    slab += '<DataItem Dimensions="2 4" Format="HDF">a.h5:/u</DataItem>'
    stream = "1 1 0  4 0 1 2  4 1 3 2"
    mixed = TRIANGLES.replace('"Triangle" NumberOfElements="2" NodesPerElement="3"', '"Mixed"')
    mixed = mixed.replace('"2 3"', '"11"').replace("0 1 2 1 3 2", stream)
    members = '<Set Name="s" SetType="Cell"><DataItem Dimensions="1" NumberType="Int">1</DataItem></Set>'
    include = (
        '<xi:include xpointer="xpointer(//Grid[@Name=&quot;m&quot;]/*[self::Topology or self::Geometry])"/>'
    )
    return index(
        folder,
        grid(members, name="m", mesh=mixed),
        temporal(
            f'<Grid>{include}<Time Value="0"/>{ARRAY}</Grid>',
            f'<Grid>{include}<Time Value="1"/><Attribute Name="v"><DataItem ItemType="HyperSlab" '
            f'Dimensions="4">{slab}</DataItem></Attribute></Grid>',
        ),
    )


def survives(path: Path) -> bool:
    """Read every step; only our own errors may come out."""
    try:
        file = xdmf.open_file(path)
        for step in range(len(file.steps or (0.0,))):
            file.read(step)
    except InputError:
        return False
    return True


def test_an_index_with_damaged_bytes_never_crashes(tmp_path: Path) -> None:
    path = sample(tmp_path)
    assert survives(path)
    whole, chance = path.read_bytes(), random.Random(20261201)
    outcomes = []
    for _ in range(1500):
        bad = bytearray(whole)
        for _ in range(chance.choice((1, 1, 2, 8))):
            where = chance.randrange(len(bad))
            kind = chance.randrange(4)
            if kind == 0:
                bad[where] = chance.randrange(256)
            elif kind == 1:
                del bad[where : where + chance.randrange(1, 30)]
            elif kind == 2:
                bad[where:where] = bad[chance.randrange(len(bad)) :][: chance.randrange(1, 30)]
            else:
                bad[where] = chance.choice(b'0123456789-." <>/')
        path.write_bytes(bytes(bad))
        outcomes.append(survives(path))
    assert 20 < sum(outcomes) < 1400


def test_an_index_cut_anywhere_is_refused(tmp_path: Path) -> None:
    path = sample(tmp_path)
    whole = path.read_bytes()
    for length in range(0, len(whole) - 1, 7):
        path.write_bytes(whole[:length])
        assert not survives(path)


def test_hdf5_with_damaged_bytes_never_crashes(tmp_path: Path) -> None:
    meant = one_cell("tetra")
    xdmf.write(meant, tmp_path / "a.xdmf")
    heavy = tmp_path / "a.xdmf.h5"
    whole, chance = heavy.read_bytes(), random.Random(7)
    outcomes = []
    for _ in range(300):
        bad = bytearray(whole)
        for _ in range(chance.choice((1, 4, 32))):
            bad[chance.randrange(len(bad))] = chance.randrange(256)
        heavy.write_bytes(bytes(bad) if chance.random() < 0.8 else whole[: chance.randrange(len(whole))])
        outcomes.append(survives(tmp_path / "a.xdmf"))
    assert 20 < sum(outcomes) < 280
