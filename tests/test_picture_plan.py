"""`unturn picture`: plans, options, what is told, tables and animations."""

from __future__ import annotations

import csv
import json
import os
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
import pyvista
from PIL import Image
from typer.testing import CliRunner

import unturn
import unturn._accessor
from picture_reading import boxes, colour, pixels_of, value_of, wanted
from unturn.cli._main import app
from unturn.errors import UsageError
from unturn.io.vtk_result import vtk_from_result
from unturn.picture_keys import PICTURE_KEYS, PictureRequest, request_of
from unturn.pictures.computing import Step
from unturn.pictures.image import picture
from unturn.pictures.plan import DEFAULT_KEYS, parse_plan
from unturn.pictures.window import check_display, fill

ROOT = Path(__file__).parent.parent
SAMPLES = ROOT / "sample_meshes"
BRACKET, LEVER = SAMPLES / "bracket.vtu", SAMPLES / "lever.xdmf"

PLAN = """\
schema = "unturn.plan/1"
title = "Bracket"

[reading]
solve = "linear"

[defaults]
size = "640x480"
range = "shared"
extremes = false

[[pictures]]
name = "front"
camera = "front"

[[pictures]]
name = "cut"
measure = "principal_strain_1"
at = "nodes"
cut = "y"
extremes = true
csv = true
"""


def run(*arguments: object) -> tuple[int, str]:
    """Exit status and what was said."""
    done = CliRunner().invoke(app, ["picture", *map(str, arguments)])
    if done.exception is not None and not isinstance(done.exception, SystemExit):
        error = done.exception
        return getattr(error, "exit_status", 70), str(error)
    return done.exit_code, done.output


def test_a_plan_is_drawn(tmp_path):
    (tmp_path / "plan.toml").write_text(PLAN)
    status, said = run(
        BRACKET, "--plan", tmp_path / "plan.toml", "-o", tmp_path, "--json", tmp_path / "out.json"
    )
    assert status == 0, said
    assert sorted(p.name for p in tmp_path.iterdir()) == [
        "cut.csv",
        "cut.png",
        "front.png",
        "out.json",
        "plan.toml",
    ]
    data = json.loads((tmp_path / "out.json").read_text())
    assert data["schema"] == "unturn.pictures/1"
    front, cut = data["pictures"]
    assert front["range"] == cut["range"]  # shared
    assert front["extremes"] == []
    assert pixels_of(tmp_path / "front.png").shape == (480, 640, 3)
    result = unturn.strain(unturn.read(BRACKET), at="nodes", solve="linear", measures=["principal_strain"])
    with open(tmp_path / "cut.csv", newline="", encoding="utf-8") as file:
        rows = list(csv.DictReader(file))
    assert list(rows[0]) == ["node_position", "node_number", "x", "y", "z", "principal_strain_1"]
    values = np.array([float(r["principal_strain_1"]) for r in rows])
    np.testing.assert_array_equal(values, result.point_data["principal_strain"][:, 0])
    (peak,) = cut["extremes"]
    assert peak["value"] == max(values) == values[peak["position"]]
    assert peak["number"] == unturn.read(BRACKET).point_data["node_number"][peak["position"]]
    np.testing.assert_array_equal([float(rows[9][k]) for k in "xyz"], result.points[9])


def test_the_same_plan_draws_the_same_pictures(tmp_path):
    (tmp_path / "plan.toml").write_text(PLAN)
    for folder in ("a", "b"):
        (tmp_path / folder).mkdir()
        assert run(BRACKET, "--plan", tmp_path / "plan.toml", "-o", tmp_path / folder)[0] == 0
    for name in ("front.png", "cut.png", "cut.csv"):
        assert (tmp_path / "a" / name).read_bytes() == (tmp_path / "b" / name).read_bytes()


@pytest.mark.derived("the line of the key in the text, and the nearest name by spelling")
@pytest.mark.parametrize(
    ("old", "new", "says"),
    [
        ('camera = "front"', 'kamera = "front"', r"plan, line 14: pictures\[1\].kamera.*Did you mean 'camera'"),
        ('camera = "front"', 'camera = "frnt"', r"plan, line 14: pictures\[1\].camera: expected auto, a direction"),
        ('solve = "linear"', 'solve = "linaer"', r"plan, line 5: reading.solve.*Did you mean 'linear'"),
        ("extremes = false", 'extremes = "no"', r"plan, line 10: defaults.extremes: expected true or false"),
        ('size = "640x480"', 'size = "64x48"', r"plan, line 8: defaults.size.*480 to 4000"),
        ('name = "front"', 'name = "a/b"', r"plan, line 13: pictures\[1\].name"),
        ('name = "cut"', 'name = "Front"', r"plan, line 17: pictures\[2\].name: another picture"),
        ('name = "cut"\n', "", r"line 16: pictures\[2\]: the key 'name' is missing"),
        ('cut = "y"', 'cut = "w"', r"line 20: pictures\[2\].cut"),
        ('range = "shared"', 'range = "9,1"', r"line 9: defaults.range.*lower end comes first"),
        ('schema = "unturn.plan/1"', 'schema = "unturn.plan/9"', r"line 1: schema"),
        ("[[pictures]]", "[pictures]", r"not a TOML file"),
        ("[reading]", "[raeding]", r"line 4: raeding.*Did you mean 'reading'"),
    ],
)  # fmt: skip
def test_a_plan_with_an_error_names_its_line(old, new, says):
    assert old in PLAN
    with pytest.raises(UsageError, match=says):
        parse_plan(PLAN.replace(old, new).encode(), "plan")


REGIONS = """
[regions.foot]
box = { from = [0.01, -1, -1], to = [1, 1, 0.006] }

[regions.hub]
sphere = { center = [9, 9, 9], radius = 1 }
"""


def test_a_plan_defines_regions(tmp_path):
    plan = parse_plan((PLAN + REGIONS).replace("extremes = true", 'only = "foot"').encode(), "plan")
    result = unturn.read(BRACKET)
    step = Step(result, plan.pictures, plan.options, None, plan.surface_poisson, plan.regions)
    subject = step.subject(plan.pictures[1])
    shown = np.flatnonzero(subject.shown(plan.pictures[1]))
    points = np.asarray(result.points)
    middle = np.empty((result.n_cells, 3))
    for block in result.blocks:
        middle[block.index] = points[block.connectivity[:, :8]].mean(axis=1)
    inside = np.flatnonzero((middle[:, 0] >= 0.01) & (middle[:, 2] <= 0.006))
    assert 20 < len(shown) < result.n_cells
    assert len(np.setxor1d(shown, inside)) <= 0.1 * len(
        shown
    )  # the mean of the corners is not quite the centroid
    (tmp_path / "plan.toml").write_text((PLAN + REGIONS).replace("extremes = true", 'only = "hub"'))
    status, said = run(BRACKET, "--plan", tmp_path / "plan.toml", "-o", tmp_path)
    assert status == 2
    assert "picture 'cut': region 'hub': it holds 0 computed cells" in said


def test_a_plan_has_a_picture_and_is_a_file(tmp_path):
    for text in ('pictures = []\nschema = "unturn.plan/1"', 'pictures = 3\nschema = "unturn.plan/1"'):
        with pytest.raises(UsageError, match="line 1: pictures: pictures are written as tables"):
            parse_plan(text.encode(), "plan")
    with pytest.raises(UsageError, match="not a TOML file"):
        parse_plan(b"\xff", "plan")
    status, said = run(BRACKET, "--plan", tmp_path, "-o", tmp_path)
    assert (status, "the plan cannot be read" in said) == (2, True)
    (tmp_path / "plan.toml").write_text(PLAN)
    status, said = run(BRACKET, "--plan", tmp_path / "plan.toml", "-o", tmp_path / "nowhere")
    assert (status, "an existing folder" in said) == (2, True)


def test_an_error_while_drawing_names_the_picture(tmp_path):
    (tmp_path / "plan.toml").write_text(PLAN.replace("principal_strain_1", "principle_strain_1"))
    status, said = run(BRACKET, "--plan", tmp_path / "plan.toml", "-o", tmp_path)
    assert status == 2
    assert "plan.toml, line 16, picture 'cut': " in said
    assert "Did you mean 'principal_strain" in said
    (tmp_path / "plan.toml").write_text(PLAN.replace('cut = "y"', 'leave_out = "part=7"'))
    status, said = run(BRACKET, "--plan", tmp_path / "plan.toml", "-o", tmp_path)
    assert status == 2
    assert "picture 'cut': region 'part=7' holds no cell" in said
    assert not list(tmp_path.glob("*.png"))


def test_every_key_is_an_option_a_key_of_plans_and_a_field():
    fields = set(PictureRequest.__dataclass_fields__)
    assert {key.name for key in PICTURE_KEYS} | {"at", "name", "source"} == fields
    assert {key.name for key in DEFAULT_KEYS} == {key.name for key in PICTURE_KEYS} | {"at", "csv"}
    usual = PictureRequest()
    for key in PICTURE_KEYS:
        assert key.default == getattr(usual, key.name), key.name
    assert parse_plan(b'schema = "unturn.plan/1"\n[[pictures]]\nname = "a"', "p").pictures[0].camera is None


def test_a_single_picture_says_what_it_shows(tmp_path):
    status, said = run(
        BRACKET, "-o", tmp_path / "x.png", "--measure", "equivalent_strain", "--camera", "front", "--factor", "1",
        "--size", "640x480", "--csv", tmp_path / "x.csv",
    )  # fmt: skip
    assert status == 0, said
    assert "displacement x 1, colours 0 to 840 microstrain" in said
    assert "largest 832.5 microstrain at element 5282 (cell 281)" in said
    assert "camera: 0,-1,0 up 0,0,1 at" in said
    assert f"wrote {tmp_path / 'x.csv'}" in said
    assert "(fitted)" in run(BRACKET, "-o", tmp_path / "x.png", "--size", "640x480")[1]


@pytest.mark.parametrize(
    ("arguments", "says"),
    [
        (["--camera", "sideways"], "--camera 'sideways': expected auto, a direction"),
        (["--range", "low"], "--range 'low': expected auto, full"),
        (["--close-up", "element 1"], "no element has the number 1"),
        (["--close-up", "element x"], "give its number"),
        (["--close-up", "region part=9"], "holds no cell"),
        (["--close-up", "nothing"], "--close-up 'nothing'"),
        (["--cut", "y through"], "--cut"),
        (["--cut", "0,0,0"], "has no length"),
        (["--factor", "much"], "--factor 'much': expected fitted, or a number"),
        (["--size", "big"], "--size"),
        (["--dpi", "5"], "--dpi '5': expected a resolution"),
        (["--camera", "front-back"], "The directions cancel"),
        (["--camera", "front up 0,1,0"], "parallel"),
        (["--camera", "front width 0"], "above zero"),
        (["--measure", "strain"], "strain has 6 components"),
        (["--measure", "strain_XW"], "strain has no component 'XW'"),
        (
            ["--measure", "strian_XX"],
            "no measure and no array of the file is called 'strian_XX'. Did you mean",
        ),
        (["--measure", "u"], "choose one to draw"),
        (["--at", "quadrature"], "not at 'quadrature'"),
        (["--step", "all"], "-o NAME.gif"),
        (["--zero-step", "0"], "not a series"),
        (["-o", "x.svg"], "written as PNG"),
        (["-o", "x.gif"], "not a series"),
        (["-o", "nowhere/x.png"], "there is no folder nowhere"),
        (["--plan", "missing.toml"], "the plan cannot be read"),
        (["--plan", "missing.toml", "--factor", "2"], "leave --factor out"),
        (["--plan", "missing.toml", "--solve", "linear"], "leave --solve out"),
        (["--colours", "rainbow"], 'one of "auto", "one-sided", "two-sided"'),
    ],
)
def test_wrong_requests_say_what_to_do(arguments, says, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    status, said = run(BRACKET, *(["-o", "x.png"] if "-o" not in arguments else []), *arguments)
    assert status == 2, said
    assert says in said
    assert not list(tmp_path.iterdir())


def test_arrays_of_the_file_and_the_displacement_are_drawn(tmp_path):
    how = ["--camera", "front", "--factor", "0", "--size", "640x480", "-o", tmp_path / "x.png"]
    for measure, says in (("part", "of each cell"), ("u_3", "at the nodes"), ("displacement", "at the nodes"),
                          ("displacement_Z", "at the nodes"), ("element_volume", "at element centroids")):  # fmt: skip
        status, said = run(BRACKET, "--measure", measure, *how)
        assert status == 0, said
        assert f"{measure} {says}" in said


@pytest.mark.derived("u - u_N: no displacement is left from a step to itself")
def test_a_zero_step_holds_for_the_displacement_too(tmp_path):
    how = [LEVER, "--measure", "displacement", "--size", "640x480", "-o", tmp_path / "x.png", "--step", "3"]
    for more, largest in (
        (["--zero-step", "3"], 0.0),
        (["--zero-step", "1", "--measure", "displacement"], None),
    ):
        status, said = run(*how, *more, "--json", tmp_path / "out.json")
        assert status == 0, said
        data = json.loads((tmp_path / "out.json").read_text())["pictures"][0]
        steps = [unturn.read(LEVER, k).point_data["u"] for k in (1, 3)]
        expected = np.linalg.norm(steps[1] - steps[0], axis=1).max() if largest is None else largest
        found = data["extremes"][0]["value"] if data["extremes"] else 0.0
        assert found == pytest.approx(expected)


def test_values_of_faces_are_drawn_on_faces(tmp_path):
    status, said = run(
        BRACKET, "--at", "surface", "--poisson", "0.3", "--size", "640x480", "-o", tmp_path / "x.png", "--arrows",
        "principal", "--only", "part=2", "--csv", tmp_path / "x.csv",
    )  # fmt: skip
    assert status == 0, said
    assert "on free faces" in said
    head, *rows = (tmp_path / "x.csv").read_text().splitlines()
    assert head.startswith("face_position,element_number,")
    parts = unturn.read(BRACKET).cell_data
    numbers = {int(row.split(",")[1]) for row in rows}
    assert numbers <= set(parts["element_number"][parts["part"] == 2].tolist())


@pytest.mark.derived("one range and one camera for all steps; the ground stays white")
def test_an_animation_has_one_range_and_one_camera(tmp_path):
    out = tmp_path / "lever.gif"
    status, said = run(
        LEVER, "-o", out, "--solve", "nonlinear", "--base", "hencky", "--factor", "1", "--size", "640x480",
        "--camera", "front", "--json", tmp_path / "out.json",
    )  # fmt: skip
    assert status == 0, said
    assert "7 steps, displacement x 1, colours 0 to 42 000 microstrain" in said
    data = json.loads((tmp_path / "out.json").read_text())["pictures"][0]
    assert data["frames"] == 7
    with Image.open(out) as image:
        assert image.n_frames == 7
        frames = []
        for k in range(7):
            image.seek(k)
            frames.append(np.asarray(image.convert("RGB")).astype(int))
    assert (frames[0][:3] == 255).all()
    bar = (slice(200, 380), slice(520, 640))
    assert all((np.abs(f[bar] - frames[0][bar]).max() <= 3) for f in frames)  # the bar and its numbers
    model = [f[100:380, :508] for f in frames]  # left of the legend
    assert np.abs(model[6] - model[0]).max() > 100
    inked = [np.flatnonzero((f < 200).any(axis=(0, 2))) for f in model]
    assert all(i[0] > 5 and i[-1] < 502 for i in inked)


def test_a_picture_in_memory_is_shown_by_notebooks(tmp_path):
    mesh = pyvista.wrap(vtk_from_result(boxes()))
    image = mesh.unturn.picture(measure="strain_XX", camera="front", factor=1, size=(640, 480), plane=None)
    assert image._repr_png_().startswith(b"\x89PNG")
    image.save(tmp_path / "x.png")
    assert (tmp_path / "x.png").read_bytes() == image.png
    drawing = image.drawn.drawing
    rgb = colour(pixels_of(tmp_path / "x.png"), drawing.camera.pixels(np.array([0.1, 0, 0.1])))
    assert value_of(rgb, *drawing.colour_range) == pytest.approx(1e-3, abs=1e-5)
    assert "colours 0 to 1 000 microstrain" in repr(image)
    with pytest.raises(UsageError, match="Did you mean 'camera'"):
        picture(boxes(), kamera="front")
    with pytest.raises(UsageError, match="expected fitted, or a number"):
        picture(boxes(), factor="x")
    with pytest.raises(UsageError, match="nothing a picture can be asked for"):
        request_of({"kamera": "front"})


def test_a_window_is_opened_only_when_asked_for_and_with_a_display(tmp_path, monkeypatch):
    monkeypatch.delenv("DISPLAY", raising=False)
    monkeypatch.delenv("WAYLAND_DISPLAY", raising=False)
    if sys.platform.startswith("linux"):
        with pytest.raises(UsageError, match="there is no display"):
            check_display()
        status, said = run(BRACKET, "--show", "-o", tmp_path / "x.png")
        assert (status, list(tmp_path.iterdir())) == (2, [])
        assert "Leave it out" in said
    monkeypatch.setenv("DISPLAY", ":1")
    check_display()


def test_the_scene_of_a_window_is_that_of_the_picture(tmp_path):
    from unturn.pictures.drawing import draw_all

    request = wanted(measure="strain_XX", symmetric=True, factor=0)
    drawn = draw_all(Step(boxes(), [request]), [request], [tmp_path / "x.png"])[0]
    added = []

    class Plotter:
        camera = type("Camera", (), {})()

        def add_mesh(self, mesh, **how):
            added.append((mesh, how))

        def __getattr__(self, name):
            return lambda *a, **k: None

    fill(Plotter(), drawn)
    mesh, how = added[0]
    assert how["scalars"] in mesh.array_names
    assert how["clim"] == pytest.approx([-1000, 1000])
    np.testing.assert_allclose(mesh["strain XX"], 1000)
    assert len(how["cmap"]) == 256


@pytest.mark.skipif(not sys.platform.startswith("linux"), reason="an empty environment is a Linux matter")
def test_the_command_needs_no_display(tmp_path):
    path = os.pathsep.join([str(ROOT / "src"), *(p for p in sys.path if p)])
    code = "import sys; from unturn.cli import main; sys.argv[0] = 'unturn'; main()"
    done = subprocess.run(
        [sys.executable, "-c", code, "picture", str(BRACKET), "-o", str(tmp_path / "x.png")],
        env={"PYTHONPATH": path}, capture_output=True, text=True, timeout=120, check=False,
    )  # fmt: skip
    assert (done.returncode, done.stderr) == (0, "")
    assert pixels_of(tmp_path / "x.png").shape == (1000, 1600, 3)


# Common practice, no source.
@pytest.mark.parametrize(
    ("options", "says"),
    [
        (["-o", "a.png", "--json", "a.png"], "named for two outputs"),
        (["-o", "a.png", "--csv", "a.png"], "named for two outputs"),
        (["-o", "a.png", "--csv", "table.csv", "--displacement-table", "table.csv"], "input file"),
        (["-o", ".", "--plan", "plan.toml", "--json", "plan.toml"], "input file"),
    ],
)
def test_no_output_replaces_an_input_or_another(options, says, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    held = {"table.csv": "node,ux,uy,uz\n1,0,0,0\n", "plan.toml": PLAN}
    for name, text in held.items():
        Path(name).write_text(text, encoding="utf-8")
    status, said = run(BRACKET, *options)
    assert status == 2, said
    assert says in said
    assert {p.name: p.read_text(encoding="utf-8") for p in tmp_path.iterdir()} == held
