"""Study files and lists: what is planned, and what is refused in one sentence with its row."""

import dataclasses
import json
import math

import numpy as np
import pytest
import trimesh

import study_stubs
from bemescape.case import parse_case
from bemescape.errors import SettingsError
from bemescape.study.document import read_study
from bemescape.study.plan import plan_study
from bemescape.study.work import Order, solve_order
from bemescape.version import __version__

LABELS = {"label": np.array([1, 1] + [0] * 10)}


def planned(study):
    return plan_study(read_study(study))


def with_list(folder, text, *, encoding="utf-8", **changes):
    study = study_stubs.write_shapes(folder, 3, **changes)
    (folder / "shapes.csv").write_bytes(text.encode(encoding))
    return study


def with_study(folder, old, new):
    study = study_stubs.write_shapes(folder, 3)
    text = study.read_text(encoding="utf-8")
    assert old in text
    study.write_text(text.replace(old, new), encoding="utf-8")
    return study


def test_every_shape_is_planned_with_every_combination_of_swept_values(tmp_path):
    study = study_stubs.write_shapes(tmp_path, 3)
    study.write_text(
        study.read_text()
        + '[sweep]\ndiffusion = ["10 um^2/s", "2e-7 cm^2/s"]\nradius = ["100 nm", "0.2 um", "300 nm"]\n'
    )
    plan = planned(study)
    assert len(plan.cases) == 3 * 2 * 3 == len(plan.distinct)
    assert plan.cases[0].swept == {"diffusion_um2_s": 10.0, "swept_radius_um": 0.1}
    assert plan.cases[0].table["window"][0]["disc"]["radius"] == "100 nm"
    assert plan.cases[5].swept["swept_radius_um"] == 0.3
    assert all(case.estimated_s > 0.0 and case.faces == 12 for case in plan.cases)


def test_number_seed_and_permeability_are_swept_in_the_window_that_is_named(tmp_path):
    study = with_study(
        tmp_path,
        "[accuracy]",
        '[[window]]\nname = "release"\nscatter = { count = 9, radius = "20 nm" }\n[sweep]\nwindow = "release"\n'
        'permeability = ["2 um/s", "inf"]\ncount = [3, 5]\nseed = [7]\n[accuracy]',
    )
    cases = planned(study).cases[:4]
    assert [case.name for case in cases][:2] == [
        "box_00 kappa=2 um/s count=3 seed=7",
        "box_00 kappa=2 um/s count=5 seed=7",
    ]
    assert [case.swept["swept_permeability_um_s"] for case in cases] == [2.0, 2.0, math.inf, math.inf]
    for case, count in zip(cases, (3, 5, 3, 5), strict=True):
        pore, release = case.table["window"]
        assert "permeability" not in pore
        assert release["scatter"] == {"count": count, "radius": "20 nm", "seed": 7}


def test_every_kind_of_window_is_a_rule_and_its_files_travel_with_the_order(tmp_path):
    """All six kinds, in a study whose worker sees nothing but its own folder."""
    box = trimesh.creation.box((1.0, 1.0, 1.0))
    box.apply_translation((1.0, 0.0, 0.0))
    (tmp_path / "axons").mkdir()
    box.export(tmp_path / "axons" / "box_00.ply")  # the name of a shape, to be told apart in the worker's folder
    (tmp_path / "sites.csv").write_text("x,y,z\n0,0.5,0\n")
    study = with_study(
        tmp_path,
        "[accuracy]",
        '[[window]]\nname = "face"\nlabels = { array = "label", value = 1 }\n'
        '[[window]]\nname = "contact"\nnear = { file = "axons/box_00.ply", unit = "um", distance = "10 nm" }\n'
        '[[window]]\nname = "cut"\nlid = { point = [0, 0, -0.4], normal = [0, 0, -1] }\n'
        '[[window]]\nname = "sites"\npoints = { file = "sites.csv", radius = "20 nm" }\n'
        '[[window]]\nname = "pores"\nscatter = { count = 2, radius = "20 nm" }\n[accuracy]',
    )
    case = planned(study).cases[0]
    seen = []

    def look(order, folder):
        found = parse_case(order.table, folder=folder, name=order.name)
        surface = found.load_surface()
        seen.extend(window.name for window in found.windows_for(dataclasses.replace(surface, face_data=LABELS)))
        return {}

    files = {name: path.read_bytes() for name, path in case.files.items()}
    order = Order(case.key, case.name, case.shape.place, case.table, files, __version__)
    (outcome,) = solve_order(order, look)
    assert not outcome.failure
    assert seen == ["pore", "face", "contact", "cut", "sites", "pores"]


def test_groups_subjects_and_covariates_come_from_the_list(tmp_path):
    text = "file,name,group,subject,age_d,stain\nbox_00.ply,first,A,mouse 1,12.5,red\nbox_01.ply,,B,mouse 2,,blue\n"
    first, second = planned(with_list(tmp_path, text)).shapes
    assert (first.name, first.group, first.subject) == ("first", "A", "mouse 1")
    assert first.covariates == {"age_d": 12.5, "stain": "red"}
    assert (second.name, second.place) == ("box_01", "shapes.csv row 3")
    assert second.covariates["age_d"] != second.covariates["age_d"]  # missing: NaN


def test_patterns_take_every_mesh_once_in_the_order_of_names(tmp_path):
    study = with_study(tmp_path, 'list = "shapes.csv"', 'files = ["box_*.ply", "**/*.ply"]\ngroup = "all"')
    plan = planned(study)
    assert [shape.name for shape in plan.shapes] == ["box_00", "box_01", "box_02"]
    assert {shape.group for shape in plan.shapes} == {"all"}


@pytest.mark.parametrize("mark", [";", "\t"])
def test_semicolons_tabs_and_the_mark_of_spreadsheets_are_read(tmp_path, mark):
    text = "\ufeff" + mark.join(["file", "group"]) + "\n" + mark.join(["box_00.ply", "A"]) + "\r\n"
    (shape,) = planned(with_list(tmp_path, text)).shapes
    assert (shape.file, shape.group) == ("box_00.ply", "A")


def test_cells_and_a_file_beside_the_mesh_replace_the_rule_for_windows(tmp_path):
    text = (
        "file,window.pore.radius,window.pore.centre,window.pore.permeability\n"
        "box_00.ply,150 nm,0 0 -0.5,10 um/s\nbox_01.ply,,,\nbox_02.ply,,,\n"
    )
    study = with_list(tmp_path, text)
    (tmp_path / "box_02.windows.toml").write_text(
        '[[window]]\nname = "own"\nscatter = { count = 3, radius = "50 nm", seed = 4 }\n'
    )
    first, second, third = (case.table["window"] for case in planned(study).cases)
    assert first == [
        {"name": "pore", "disc": {"centre": [0.0, 0.0, -0.5], "radius": "150 nm"}, "permeability": "10 um/s"}
    ]
    assert second == [{"name": "pore", "disc": {"centre": [0, 0, 0.5], "radius": "200 nm"}}]
    assert third == [{"name": "own", "scatter": {"count": 3, "radius": "50 nm", "seed": 4}}]


def test_the_key_follows_everything_that_the_answer_depends_on_and_nothing_else(tmp_path):
    (tmp_path / "one").mkdir()
    (tmp_path / "two").mkdir()
    before = [case.key for case in planned(study_stubs.write_shapes(tmp_path / "one", 3)).cases]
    assert len(set(before)) == 3
    # Another folder, name, group and column: the same cases.
    text = "file,name,group,other\nbox_00.ply,x,Q,1\nbox_01.ply,y,Q,2\nbox_02.ply,z,Q,3\n"
    other = with_list(tmp_path / "two", text)
    assert [case.key for case in planned(other).cases] == before
    other.write_text(other.read_text().replace("200 nm", "0.2 um"))
    assert [case.key for case in planned(other).cases] == before
    for old, new in (("0.2 um", "201 nm"), ("1 um^2/s", "2 um^2/s"), ('"5 %"', '"4 %"'), ("0.5]", "0.4]")):
        text = other.read_text()
        other.write_text(text.replace(old, new))
        assert set(case.key for case in planned(other).cases).isdisjoint(before), new
        other.write_text(text)
    mesh = tmp_path / "two" / "box_00.ply"
    mesh.write_bytes((tmp_path / "two" / "box_01.ply").read_bytes())
    keys = [case.key for case in planned(other).cases]
    assert keys == [before[1], before[1], before[2]]
    assert len(planned(other).distinct) == 2


@pytest.mark.parametrize(
    ("text", "sentence"),
    [
        ("file,group\nbox_00.ply,A\nmissing.ply,B\n", r"shapes\.csv row 3: there is no file .*missing\.ply"),
        (
            "file,group\nbox_00.ply,A\nbox_00.ply,B\n",
            r"row 3: the name 'box_00' .* is also that of box_00\.ply .*w 2",
        ),
        ("file,name\nbox_00.ply,x\nbox_01.ply,X\n", r"row 3: the name 'X' .*row 2"),
        ("file,unit\nbox_00.ply,furlongs/h\n", r"row 2: unit of the file 'furlongs/h' is not"),
        ('file,unit\nbox_00.ply,"nm,nm"\n', r"row 2: the unit is 'nm,nm'"),
        ("file,age_d\nbox_00.ply,12,5\n", r"row 2 has 3 cells, but the header has 2; decimal commas"),
        ('file,age_d\nbox_00.ply,"12,5"\n', r"row 2, column 'age_d': '12,5' has a decimal comma; write 12\.5"),
        ("file;age_d\nbox_00.ply;12,5\n", r"row 2, column 'age_d': '12,5' has a decimal comma"),
        ("file,group\nbox_00.ply\n", r"row 2 has 1 cells, but the header has 2; fill the row"),
        ("mesh,group\nbox_00.ply,A\n", r"row 1 names the columns 'mesh', 'group'; one of them must be 'file'"),
        ("file,age,age\nbox_00.ply,1,2\n", r"row 1 names the column 'age' twice"),
        ("file,group\n,A\n", r"row 2: the column 'file' is empty"),
        ("file\n" + 5000 * "x" + ".ply\n", r"row 2: there is no file"),
        ("file\n.\n", r"row 2: there is no file"),
        ("file\nshapes.csv\n", r"row 2: 'shapes\.csv' is no mesh file; such files end in \.ply"),
        ("file,group\nbox_00.ply,A\0\n", r"row 2: the group 'A\\x00' is too long or not printable"),
        ("file,subject\nbox_00.ply," + 101 * "m" + "\n", r"row 2: the subject 'm+' is too long"),
        ("file,group\n", r"names no shape"),
        ("", r"row 1 names the columns nothing"),
        ('file,group\n"box_00.ply,A\n', r"row \d is not CSV"),
        (
            "file,window.hole.radius\nbox_00.ply,1 nm\n",
            r"row 2: the column 'window\.hole\.radius' names",
        ),
        ("file,window.pore.radius\nbox_00.ply,wide\n", r"row 2: \[\[window\]\] 'pore' disc\.radius 'wide' is not"),
        ("file,window.pore.radios\nbox_00.ply,1 nm\n", r"row 2: .*disc\.radios is not known; did you mean 'radius'"),
    ],
)
def test_a_wrong_list_is_refused_with_its_row(tmp_path, text, sentence):
    with pytest.raises(SettingsError, match=sentence) as refusal:
        planned(with_list(tmp_path, text))
    assert "\n" not in str(refusal.value)


def test_a_list_that_is_not_utf_8_is_refused_with_its_row(tmp_path):
    with pytest.raises(SettingsError, match=r"shapes\.csv row 2 is not UTF-8 text; save the list as CSV UTF-8"):
        planned(with_list(tmp_path, "file,group\nbox_00.ply,fötal\n", encoding="latin-1"))


@pytest.mark.parametrize(
    ("old", "new", "sentence"),
    [
        ('unit = "um"', 'unit = "parsnips"', r"\[\[shapes\]\] number 1 unit: of the file 'parsnips' is not .*'nm'"),
        ('unit = "um"', "", r"row 2: no unit, neither in the row nor in \[\[shapes\]\]"),
        (
            'list = "shapes.csv"',
            'list = "nowhere.csv"',
            r"\[\[shapes\]\] number 1: list is 'nowhere.csv', but",
        ),
        ('list = "shapes.csv"', 'files = "none/*.ply"', r"files is 'none/\*\.ply', but no mesh file"),
        ('list = "shapes.csv"', "", r"\[\[shapes\]\] number 1 has neither files nor list"),
        ("list =", "lists =", r"\[\[shapes\]\] number 1 lists is not known; did you mean 'list'\?"),
        ("[motion]", "[moton]", r"\[moton\] is not known; did you mean 'motion'\?"),
        ('[motion]\ndiffusion = "1 um^2/s"', "", r"has no \[motion\]"),
        ("[accuracy]", '[sweep]\ndiffusion = ["1 nm"]\n[accuracy]', r"\[sweep\] diffusion.*'1 nm' is not"),
        ("[accuracy]", '[sweep]\nradius = ["1 nm", "0.001 um"]\n[accuracy]', r"has the value '0\.001 um' twice"),
        ("[accuracy]", "[sweep]\nseed = [1, 2]\n[accuracy]", r"row 2: \[sweep\] seed has no window to act on"),
        (
            "[accuracy]",
            '[sweep]\npermeability = ["1 um/s"]\nwindow = "hole"\n[accuracy]',
            r"row 2: \[sweep\] permeability has no window to act on; \[sweep\] window, if given, must be its name",
        ),
        ("[accuracy]", "[sweep]\nseed = [true]\n[accuracy]", r"\[sweep\] seed\[0\] is True"),
        (
            "[accuracy]",
            '[sweep]\ndiffusion = "1 um^2/s"\n[accuracy]',
            r"\[sweep\] diffusion is '1 um\^2/s'; it should be a list; write",
        ),
        ('list = "shapes.csv"', 'files = ""', r"\[\[shapes\]\] number 1 files\[0\] is ''; give the path"),
        ('list = "shapes.csv"', 'list = "."', r"\[\[shapes\]\] number 1: list is .*, but there is no file"),
        (
            'disc = { centre = [0, 0, 0.5], radius = "200 nm" }',
            'near = { file = "axon.ply", unit = "um", distance = "9 nm" }',
            r"row 2: window 'pore' names the file 'axon.ply', but there is no file",
        ),
    ],
)
def test_a_wrong_study_file_is_refused_with_its_place(tmp_path, old, new, sentence):
    with pytest.raises(SettingsError, match=sentence):
        planned(with_study(tmp_path, old, new))


@pytest.mark.parametrize(
    ("content", "sentence"),
    [
        (b"\x89PNG\r\n\xff", r"box_01\.windows\.toml is not valid TOML"),
        (b"window = [1, 2]\n", r"box_01\.windows\.toml holds no \[\[window\]\]"),
        (b'[motion]\ndiffusion = "1 um^2/s"\n', r"box_01\.windows\.toml holds 'motion'"),
        (b'[[window]]\nname = "a"\ndisk = {}\n', r"row 3, box_01\.windows\.toml: \[\[window\]\] 'a' disk is not known"),
        (None, r"box_01\.windows\.toml is not valid TOML.*directory"),
    ],
)
def test_a_damaged_file_of_windows_beside_a_mesh_is_refused_by_name(tmp_path, content, sentence):
    study = study_stubs.write_shapes(tmp_path, 3)
    beside = tmp_path / "box_01.windows.toml"
    beside.mkdir() if content is None else beside.write_bytes(content)
    with pytest.raises(SettingsError, match=sentence):
        planned(study)


@pytest.mark.parametrize("content", [b"", b"\x89PNG\r\n\x1a\n\0\xff", "# fötal".encode("latin-1"), b"[[shapes"])
def test_a_study_file_of_another_kind_is_refused(tmp_path, content):
    study = tmp_path / "x.study.toml"
    study.write_bytes(content)
    with pytest.raises(SettingsError, match=r"x\.study\.toml"):
        planned(study)
    with pytest.raises(SettingsError, match="is a folder; give the study file in it"):
        planned(tmp_path)


def test_a_study_without_windows_names_the_shape(tmp_path):
    study = with_study(tmp_path, '[[window]]\nname = "pore"\ndisc = { centre = [0, 0, 0.5], radius = "200 nm" }\n', "")
    with pytest.raises(SettingsError, match=r"row 2: shape 'box_00' has no window; .*box_00\.windows\.toml"):
        planned(study)


def test_the_schema_names_every_section_of_a_study_file():
    from bemescape import study_schema

    text = json.dumps(study_schema())
    for key in ("shapes", "motion", "window", "accuracy", "sweep", "statistics", "subject"):
        assert f'"{key}"' in text
