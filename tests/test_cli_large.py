"""The options of large turning on the command line: what they write, and how wrong combinations are answered."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest

from documents import run
from unturn import io

SAMPLES = Path(__file__).parents[1] / "sample_meshes"
LEVER, BRACKET, RING, SKIN = (SAMPLES / n for n in ("lever.xdmf", "bracket.vtu", "ring.vtu", "skin.vtu"))
PULL = ["--plane", "stress", "--poisson", "0.3"]


@pytest.mark.parametrize(
    ("file", "arguments", "status", "said"),
    [
        (LEVER, ["--base", "hencky", "--solve", "linear"], 2, "of a geometrically linear solve are fiction"),
        (LEVER, ["--measures", "finite_rotation", "--solve", "linear"], 2, "are fiction"),
        (LEVER, ["--base", "logarithmic"], 2, "'logarithmic' is not one of"),
        (LEVER, ["--measures", "strain_henky"], 2, "Did you mean 'strain_hencky'"),
        (LEVER, ["--measures", "equivalent_strain_log"], 2, "no measure is called"),
        (LEVER, ["--frame", "polar"], 2, "--frame 'polar' is not understood"),
        (LEVER, ["--frame", "cylindrical 0,0,0"], 2, "a direction has no length"),
        (LEVER, ["--frame", "arrays fibre side"], 2, "no cell array is called 'fibre'"),
        (LEVER, ["--frame", "surface"], 2, "needs surface cells"),
        (LEVER, ["--measures", "surface_normal"], 2, "needs surface cells"),
        (LEVER, ["--remove-rigid", "hub"], 2, "no region is called 'hub'"),
        (LEVER, ["--remove-rigid", "part=7"], 2, "holds no cell"),
        (LEVER, ["--remove-rigid", "part=2", "--rigid-to", "part=x"], 2, "'x' is not a number"),
        (LEVER, ["--remove-rigid", "part=2", "--rigid-to", "arm"], 2, "no region is called 'arm'"),
        (LEVER, ["--rigid-to", "part=1"], 2, "belong to --remove-rigid"),
        (LEVER, ["--rigid-axis", "0,0,1"], 2, "belong to --remove-rigid"),
        (LEVER, ["--remove-rigid", "regions", "--rigid-to", "whole"], 2, "needs one region"),
        (LEVER, ["--remove-rigid", "whole", "--rigid-axis", "z"], 2, "--rigid-axis 'z' is not understood"),
        (LEVER, ["--remove-rigid", "whole", "--rigid-axis", "0,0,1 by 1,0,0"], 2, "is not understood"),
        (LEVER, ["--remove-rigid", "whole", "--rigid-axis", "nan,0,1"], 2, "is not understood"),
        (LEVER, ["--remove-rigid", "whole", "--rigid-axis", "0,0,0"], 2, "no length"),
        (LEVER, ["--thermal-expansion", "1e-5"], 2, "needs all three"),
        (LEVER, ["--temperature", "T", "--reference-temperature", "20"], 2, "needs all three"),
        (LEVER, ["--thermal-expansion", "1e-5", "--temperature", "T", "--reference-temperature", "20"], 2,
         "no array is called 'T'"),
        (LEVER, ["--measures", "mechanical_strain"], 2, "needs the free thermal strain"),
        (LEVER, ["--zero-step", "7"], 2, "has 7 steps, 0 to 6"),
        (LEVER, ["--plane", "strain"], 2, "needs a mesh whose highest cells are two-dimensional"),
        (LEVER, ["--poisson", "0.7"], 2, "between -1 and 0.5"),
        (BRACKET, ["--zero-step", "0"], 2, "is not a series"),
        (RING, ["--base", "hencky"], 2, "depend on the strain across the plane"),
        (RING, ["--measures", "det_f,strain"], 2, "det_f depend"),
        (RING, ["--plane", "stress"], 2, "needs --poisson"),
        (RING, [*PULL, "--remove-rigid", "whole", "--rigid-axis", "1,0,0"], 2, "turns about z only"),
        (LEVER, ["--zero-step", "9"], 2, "--zero-step 9 does not exist"),
        (LEVER, ["--displacement-scale", "0"], 2, "must be a number other than zero"),
        (LEVER, ["--displacement-scale", "nan"], 2, "must be a number other than zero"),
        (LEVER, ["--equivalent-poisson", "-1"], 2, "between -1 and 0.5"),
        (LEVER, ["--equivalent-poisson", "nan"], 2, "between -1 and 0.5"),
        (LEVER, ["--thermal-expansion", "1e-5", "--temperature", "T", "--reference-temperature", "nan"], 2,
         "is not a temperature"),
        (LEVER, ["--poisson", "0.3"], 2, "this mesh has no cells of either"),
        (RING, ["--measures", "strain", "--poisson", "0.3"], 2, "belongs to --plane stress"),
        (RING, ["--plane", "strain", "--axis", "x"], 2, "belongs to --plane axisymmetric"),
        (RING, ["--measures", "strain", "--frame", "cartesian 1,0,1 0,1,1"], 2, "none of its axes lies in the plane"),
        (LEVER, ["--displacement", "u", "--displacement-table", "u.csv"], 2, "exclude each other"),
        (LEVER, ["--step", "all", "--displacement-table", "u.csv"], 2, "holds the displacement of one state"),
        (LEVER, ["--zero-step", "0", "--displacement-table", "u.csv"], 2, "holds the displacement of one state"),
        (SAMPLES / "nothing.vtu", ["--base", "hencky"], 3, "nothing.vtu"),
    ],
)  # fmt: skip
def test_wrong_combinations(tmp_path: Path, file: Path, arguments: list[str], status: int, said: str) -> None:
    found, text = run(["strain", str(file), "-o", str(tmp_path / f"out{file.suffix}"), *arguments])
    assert found == status, text
    assert said in " ".join(text.split()), text
    assert "Traceback" not in text
    assert "fault of unturn" not in text
    assert not list(tmp_path.iterdir())  # nothing is written


@pytest.mark.parametrize("base", ["green-lagrange", "hencky", "biot", "almansi"])
def test_a_finite_base_names_its_arrays_and_its_rows(tmp_path: Path, base: str) -> None:
    target, data = tmp_path / "out.xdmf", tmp_path / "out.json"
    status, said = run(
        ["strain", str(LEVER), "-o", str(target), "--solve", "nonlinear", "--base", base, "--json", str(data)]
    )
    assert status == 0, said
    key = base.replace("-", "_")
    added = {f"strain_{key}", "finite_rotation", f"equivalent_strain_{key}", f"principal_strain_{key}"}
    written = io.read(target)
    assert set(written.cell_data) == {"part"} | added
    summary = json.loads(data.read_text())
    assert set(summary["measures"]) == added
    region = summary["regions"][0]["statistics"]
    assert {"det_f", "stretch_1", "stretch_3", f"equivalent_strain_{key}"} <= set(region)
    principal = written.cell_data[f"principal_strain_{key}"]
    peaks = [r["statistics"][f"principal_strain_{key}_1"]["maximum"]["value"] for r in summary["regions"]]
    assert max(peaks) == principal[:, 0].max()
    for row in ("det F, smallest", "det F, largest", "stretch, smallest", "stretch, largest"):
        assert row in said


def test_all_of_a_base(tmp_path: Path) -> None:
    target = tmp_path / "out.xdmf"
    status, said = run(
        [
            "strain",
            str(LEVER),
            "-o",
            str(target),
            "--solve",
            "nonlinear",
            "--measures",
            "all,det_f",
            "--base",
            "hencky",
        ]
    )
    assert status == 0, said
    names = set(io.read(target).cell_data)
    assert {"strain_hencky", "max_shear_strain_hencky", "principal_direction_1_hencky", "det_f", "element_volume",
            "displacement_gradient", "finite_rotation_angle"} <= names  # fmt: skip
    assert not {"strain", "rotation", "equivalent_strain"} & names


def test_frames_and_rigid_motion_together(tmp_path: Path) -> None:
    target = tmp_path / "out.xdmf"
    status, said = run(
        ["strain", str(LEVER), "-o", str(target), "--solve", "nonlinear", "--remove-rigid", "part=2", "--rigid-to", "whole",
         "--frame", "cylindrical z", "--measures", "strain,equivalent_strain"]
    )  # fmt: skip
    assert status == 0, said
    found = io.read(target)
    assert found.component_names["cell", "strain"] == ("RR", "TT", "ZZ", "RT", "TZ", "RZ")
    plain = tmp_path / "plain.xdmf"
    run(["strain", str(LEVER), "-o", str(plain), "--solve", "nonlinear", "--remove-rigid", "part=2", "--rigid-to", "whole",
         "--measures", "strain,equivalent_strain"])  # fmt: skip
    other = io.read(plain)
    np.testing.assert_array_equal(found.cell_data["equivalent_strain"], other.cell_data["equivalent_strain"])
    traces = [r.cell_data["strain"][:, :3].sum(axis=1) for r in (found, other)]
    np.testing.assert_allclose(traces[0], traces[1], atol=1e-15)


def test_a_known_axis_on_the_command_line(tmp_path: Path) -> None:
    target = tmp_path / "out.xdmf"
    status, said = run(
        ["strain", str(LEVER), "-o", str(target), "--solve", "nonlinear", "--remove-rigid", "part=2", "--rigid-to", "whole",
         "--rigid-axis", "0,0,2 through 0,0,0.5"]
    )  # fmt: skip
    assert status == 0, said
    rotation = np.degrees(io.read(target).field_data["rigid_rotation"])
    np.testing.assert_array_equal(rotation[:, :2], 0)
    assert rotation[0, 2] == pytest.approx(90, abs=0.5)


def test_a_skin_has_its_own_frame_and_thickness(tmp_path: Path) -> None:
    target = tmp_path / "out.vtu"
    arguments = [
        "strain",
        str(SKIN),
        "-o",
        str(target),
        "--frame",
        "surface",
        "--base",
        "hencky",
        "--overwrite",
    ]
    status, said = run([*arguments, "--measures", "strain,det_f,surface_normal", "--poisson", "0.3"])
    assert status == 0, said
    assert "thickness of plane stress, nu = 0.3" in said
    found = io.read(target).cell_data
    strains = found["strain_hencky"]
    np.testing.assert_allclose(strains[:, 2], -0.3 / 0.7 * (strains[:, 0] + strains[:, 1]), atol=1e-14)
    np.testing.assert_allclose(np.log(found["det_f"]), strains[:, :3].sum(axis=1), atol=1e-14)
    np.testing.assert_allclose(np.linalg.norm(found["surface_normal"], axis=1), 1)
    status, said = run([*arguments, "--measures", "strain"])
    assert status == 0, said
    np.testing.assert_allclose(io.read(target).cell_data["strain_hencky"][:, 2], 0, atol=1e-14)


@pytest.mark.derived(
    "the solver's strain is of the whole motion from the undeformed state: it is compared with that"
)
def test_the_solver_is_compared_on_the_whole_motion(tmp_path: Path) -> None:
    from unturn import strain
    from unturn.options import StrainOptions
    from unturn.pipeline import compute
    from unturn.summary import summarise

    plain = io.read(LEVER)
    own = strain(plain, measures=["strain"]).cell_data["strain"]
    result = plain.with_arrays(cell_data={"EPS": own})
    for more in (
        {},
        {"remove_rigid": "regions"},
        {"remove_rigid": "whole", "solve": "nonlinear", "frame": "cylindrical z"},
    ):
        (found,) = summarise(compute(result, StrainOptions(**more), diagnose=True)).agreements  # type: ignore[arg-type]
        assert found.agrees, more
        assert found.difference < 1e-9
    zero = io.read(LEVER, 2)
    assert summarise(compute(result, StrainOptions(), zero=zero, diagnose=True)).agreements == ()
