"""Study files and lists: what is planned, and what is refused in one sentence with its row."""

import json

import pytest

import study_stubs
from bemescape.errors import SettingsError
from bemescape.study.document import read_study
from bemescape.study.plan import plan_study


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
    ],
)
def test_a_wrong_study_file_is_refused_with_its_place(tmp_path, old, new, sentence):
    with pytest.raises(SettingsError, match=sentence):
        planned(with_study(tmp_path, old, new))


def test_a_study_without_windows_names_the_shape(tmp_path):
    study = with_study(tmp_path, '[[window]]\nname = "pore"\ndisc = { centre = [0, 0, 0.5], radius = "200 nm" }\n', "")
    with pytest.raises(SettingsError, match=r"row 2: shape 'box_00' has no window; .*box_00\.windows\.toml"):
        planned(study)


def test_the_schema_names_every_section_of_a_study_file():
    from bemescape import study_schema

    text = json.dumps(study_schema())
    for key in ("shapes", "motion", "window", "accuracy", "sweep", "statistics", "subject"):
        assert f'"{key}"' in text
