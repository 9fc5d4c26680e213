"""The case file: what is accepted, and what each mistake is told."""

import math
import tomllib
from dataclasses import dataclass, field
from pathlib import Path

import jsonschema
import numpy as np
import pytest
import trimesh
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from bemescape.case import Case, case_schema, parse_case, read_case
from bemescape.errors import SettingsError
from bemescape.surface.surface import Surface
from bemescape.windows.window import Disc, Labels, Lid, Near, Points, Scatter

GOOD = """
[surface]
file = "tissue/bouton.ply"
unit = ["4 nm", "4 nm", "40 nm"]
[motion]
diffusion = "20 um^2/s"
[[window]]
name = "neck"
disc = { centre = [100.0, 0, -620.0], radius = "60 nm" }
[[window]]
name = "release face"
labels = { array = "label", value = 1 }
permeability = "1 mm/s"
[accuracy]
target = "0.2 %"
max_panels = 20000
[start]
points = { vesicle = [10, 20, 30] }
"""


@pytest.fixture
def written(tmp_path):
    def write(text: str | bytes) -> Path:
        path = tmp_path / "bouton.toml"
        path.write_bytes(text if isinstance(text, bytes) else text.encode())
        return path

    return write


def changed(before: str, after: str) -> str:
    assert before in GOOD
    return GOOD.replace(before, after)


def voxel_surface() -> Surface:
    """Any surface with the units of the case above."""
    return Surface(np.eye(3), [[0, 1, 2]], unit_um=(0.004, 0.004, 0.040))


def test_a_case_file_is_read_into_package_units(written):
    case = read_case(written(GOOD))
    assert case.name == "bouton"
    assert case.document.motion.diffusion_um2_s == 20.0
    assert case.document.accuracy.target == 0.002
    assert case.document.accuracy.max_panels == 20000
    assert case.surface_path == case.folder / "tissue" / "bouton.ply"


def test_positions_are_scaled_per_axis_and_radii_are_not(written):
    case = read_case(written(GOOD))
    neck, face = case.windows_for(voxel_surface())
    assert neck.name == "neck"
    assert isinstance(neck.shape, Disc)
    # 100 and -620 file units of 4 and 40 nm; rounding of one product each
    np.testing.assert_allclose(neck.shape.centre_um, (0.4, 0.0, -24.8), rtol=1e-15)
    assert neck.shape.radius_um == 0.06
    assert neck.permeability_um_s == math.inf
    assert face.shape == Labels("label", 1.0)
    assert face.permeability_um_s == 1000.0
    np.testing.assert_allclose(case.start_um(voxel_surface())["vesicle"], (0.04, 0.08, 1.2), rtol=1e-15)


KINDS = """
[[window]]
name = "contact"
near = { file = "psd.ply", unit = "nm", distance = "20 nm" }
permeability = "3 um/s"
[[window]]
name = "mouth"
lid = { point = [100, 0, 10], normal = [1, 0, 1], near = [0, 50, 10] }
[[window]]
name = "pores"
points = { file = "pores.csv", radius = "25 nm", farthest = "1 um" }
[[window]]
name = "crowd"
scatter = { density = "3 /um^2", radius = "25 nm", gap = "100 nm", seed = 5 }
compact = true
"""


def with_all_kinds(tmp_path) -> Case:
    trimesh.creation.box((1000.0, 1000.0, 10.0)).export(tmp_path / "psd.ply")
    (tmp_path / "pores.csv").write_text("x,y,z\n100,0,10\n0,100,0\n")
    path = tmp_path / "kinds.toml"
    path.write_text(GOOD.split("[[window]]")[0] + KINDS)
    return read_case(path)


def test_every_kind_of_window_is_scaled_from_the_units_of_its_file(tmp_path):
    contact, mouth, pores, crowd = with_all_kinds(tmp_path).windows_for(voxel_surface())
    assert isinstance(contact.shape, Near)
    np.testing.assert_allclose(contact.shape.other.bounds, [[-0.5, -0.5, -0.005], [0.5, 0.5, 0.005]], rtol=1e-12)
    assert (contact.shape.distance_um, contact.permeability_um_s) == (0.02, 3.0)
    assert isinstance(mouth.shape, Lid)
    np.testing.assert_allclose(mouth.shape.point_um, (0.4, 0.0, 0.4), rtol=1e-15)
    np.testing.assert_allclose(mouth.shape.near_um, (0.0, 0.2, 0.4), rtol=1e-15)
    # A step of one voxel along x and z: 4 nm and 40 nm.
    np.testing.assert_allclose(mouth.shape.normal, np.array([1, 0, 10]) / np.sqrt(101), rtol=1e-14)
    assert isinstance(pores.shape, Points)
    np.testing.assert_allclose(pores.shape.positions_um, [[0.4, 0.0, 0.4], [0.0, 0.4, 0.0]], rtol=1e-15)
    assert pores.shape.lines == (2, 3)
    assert pores.shape.farthest_um == 1.0
    assert crowd.shape == Scatter(None, 3.0, 0.025, 0.1, 5)
    assert (pores.compact, crowd.compact) == (None, True)


@pytest.mark.parametrize(
    ("window", "told"),
    [
        (
            "lid = { point = [0, 0, 10], normal = [0, 0, 1] }\ncompact = true",
            "is compact, which only a disc, points or",
        ),
        ('disc = { centre = [0, 0, 0], radius = "9 nm" }\ncompact = "yes"', r"'pore' compact is 'yes'.*compact = true"),
    ],
)
def test_a_compact_window_is_round_and_says_so_with_true_or_false(written, window, told):
    text = GOOD.split("[[window]]")[0] + f"[[window]]\nname = 'pore'\n{window}\n"
    with pytest.raises(SettingsError, match=told):
        read_case(written(text))


def test_a_missing_file_of_a_window_is_named_with_the_window(tmp_path):
    case = with_all_kinds(tmp_path)
    (tmp_path / "pores.csv").unlink()
    with pytest.raises(SettingsError, match=r"\[\[window\]\] 'pores' points.file is 'pores.csv', but there is no file"):
        case.windows_for(voxel_surface())
    (tmp_path / "psd.ply").unlink()
    with pytest.raises(SettingsError, match=r"'contact' near.file is 'psd.ply'.*relative to the case file"):
        case.windows_for(voxel_surface())


def test_defaults_are_half_a_percent_and_automatic_healing(written):
    text = GOOD.split("[accuracy]")[0]
    case = read_case(written(text))
    assert case.document.accuracy.target == 0.005
    assert case.document.accuracy.max_panels is None
    assert case.document.surface.heal == "auto"
    assert case.start_um(voxel_surface()) == {}


@pytest.mark.parametrize(
    ("before", "after", "sentence"),
    [
        ("diffusion", "difusion", r"\[motion\] difusion is not known; did you mean 'diffusion'\?"),
        ("[motion]", "[motoin]", r"\[motoin\] is not known; did you mean 'motion'\?"),
        ("unit =", "units =", r"\[surface\] units is not known; did you mean 'unit'\?"),
        ("disc =", "dics =", r"\[\[window\]\] 'neck' dics is not known; did you mean 'disc'\?"),
        ("radius", "radus", r"\[\[window\]\] 'neck' disc.radus is not known; did you mean 'radius'\?"),
        ("target", "trget", r"\[accuracy\] trget is not known; did you mean 'target'\?"),
        ("[start]", "[start]\ntarget = 1", r"\[start\] target is not known here; it belongs in \[accuracy\]"),
        ("disc =", "hole =", r"hole is not known; known here: name, disc, labels, near, lid, points, scatter, perm"),
        ("disc =", "near =", r"'neck' near.centre is not known; known here: file, unit, distance"),
        ("disc = { centre = [100.0, 0, -620.0],", "scatter = {", r"'neck' scatter has neither count nor density"),
        (
            "disc = { centre = [100.0, 0, -620.0],",
            'scatter = { count = 3, density = "1 /um^2",',
            r"'neck' scatter has count and density; give exactly one of them",
        ),
        (
            "disc = { centre = [100.0, 0, -620.0],",
            'scatter = { density = "3 um",',
            r"'neck' scatter.density '3 um' is not a quantity in um\^-2; write it like '3 /um\^2'",
        ),
        (
            "disc = { centre = [100.0, 0, -620.0],",
            "scatter = { count = 2.0,",
            r"'neck' scatter.count is 2.0; it should be a valid integer; write count = 40",
        ),
        (
            "disc = { centre = [100.0, 0, -620.0],",
            "points = {",
            r"'neck' points.file is missing; write file = \"pores.csv\"",
        ),
        (
            'disc = { centre = [100.0, 0, -620.0], radius = "60 nm" }',
            "lid = { point = [0, 0, 1], normal = [0, 0, 0] }",
            r"'neck' lid has the normal \[0, 0, 0\], which has no direction",
        ),
        (
            'disc = { centre = [100.0, 0, -620.0], radius = "60 nm" }',
            'near = { file = "psd.ply", distance = "20 nm" }',
            r"'neck' near.unit is missing; write unit = \"nm\"",
        ),
        ('diffusion = "20 um^2/s"', "", r"\[motion\] diffusion is missing; write diffusion = \"20 um\^2/s\""),
        ('"20 um^2/s"', "20", r"\[motion\] diffusion is the plain number 20; give it with its unit"),
        ('"20 um^2/s"', '"20 s"', r"\[motion\] diffusion.*'20 s' is not a quantity in um\^2/s"),
        ('"20 um^2/s"', "true", r"\[motion\] diffusion.*True, not a quantity"),
        (
            '"20 um^2/s"',
            '"-20 um^2/s"',
            r"\[motion\] diffusion.*-20 µm²/s; it must be a finite number above 0",
        ),
        ('"60 nm"', '"-60 nm"', r"'neck' disc.radius.*-0.06 µm; it must be a finite number above 0"),
        ('"60 nm"', "nan", r"'neck' disc.radius is the plain number nan"),
        ('"1 mm/s"', '"1 mm"', r"'release face' permeability '1 mm' is not a quantity in um/s"),
        (
            "[100.0, 0, -620.0]",
            "[100.0, 0]",
            r"disc.centre is \[100.0, 0\]; it should be a list of three numbers",
        ),
        ("[100.0, 0, -620.0]", "[1, 2, 3, 4]", r"disc.centre is \[1, 2, 3, 4\]; .*three numbers"),
        ("[100.0, 0, -620.0]", "7", r"disc.centre is 7; it should be a list of three numbers"),
        ("100.0,", "nan,", r"disc.centre\[0\] is nan; it should be a finite number"),
        ("100.0,", "true,", r"disc.centre\[0\] is True; it should be a valid number"),
        ("100.0,", '"100",', r"disc.centre\[0\] is '100'; it should be a valid number"),
        ("100.0,", "1" + "0" * 400 + ",", r"a number of more than 18 digits"),
        ("100.0,", "1" + "0" * 5000 + ",", r"too many digits"),
        ("value = 1", "value = inf", r"'release face' labels.value is inf; it should be a finite number"),
        ("value = 1", 'value = "a"', r"'release face' labels.value is 'a'"),
        ('unit = ["4 nm", "4 nm", "40 nm"]', "", r"\[surface\] unit is missing; write unit = \"nm\""),
        ('["4 nm", "4 nm", "40 nm"]', "4", r"\[surface\] unit is 4; write \"nm\", \"4 nm\" or"),
        ('["4 nm", "4 nm", "40 nm"]', '["nm", "nm"]', r"\[surface\] unit is \['nm', 'nm'\]"),
        ('["4 nm", "4 nm", "40 nm"]', '"voxel"', r"\[surface\] unit.*'voxel' is not a quantity in um"),
        ('file = "tissue/bouton.ply"', 'file = ""', r"\[surface\] file is ''; give the path"),
        ('file = "tissue/bouton.ply"', 'file = "a\\u0000b"', r"\[surface\] file is 'a\\x00b'"),
        (
            "[motion]",
            'heal = "always"\n[motion]',
            r"\[surface\] heal is 'always'; it should be 'none', 'auto' or",
        ),
        ('"neck"', '""', r"\[\[window\]\] number 1 name is ''"),
        ('"neck"', '"a\\nb"', r"number 1 name is 'a\\nb'"),
        ('"neck"', "3", r"number 1 name is 3; it should be a valid string"),
        ('"neck"', '"release face"', r"2 windows named 'release face'; give each its own name"),
        (
            "labels = { array",
            "# ",
            r"'release face' has no kind; a window has exactly one of disc, labels, near, lid, points or scatter",
        ),
        (
            '"60 nm" }',
            '"60 nm" }\nlabels = { array = "label", value = 2 }',
            r"'neck' has disc and labels; a window has exactly one of disc, labels, near, lid, points or scatter",
        ),
        ('"0.2 %"', "5", r"\[accuracy\] target is 5; it must lie between 0 and 1"),
        ('"0.2 %"', '"best"', r"\[accuracy\] target 'best' is not a plain number or percentage"),
        ("20000", "5", r"\[accuracy\] max_panels is 5; it should be greater than or equal to 100"),
        ("20000", "2e4", r"\[accuracy\] max_panels is 20000.0; it should be a valid integer"),
        ("20000", "true", r"\[accuracy\] max_panels is True"),
        ("[10, 20, 30]", "[10, 20]", r"\[start\] points.vesicle is \[10, 20\]; .*three numbers"),
        ("vesicle", '""', r"\[start\] points.name is ''; a name has 1 to 60"),
        ("[motion]", "motion = 3\n[m]", r"motion"),
        ("[motion]", "[motion", r"not valid TOML: .*line 5"),
        ('"neck"', '"neck', r"not valid TOML: .*line 8"),
    ],
)
def test_a_mistake_is_told_in_one_sentence_with_its_place(written, before, after, sentence):
    path = written(changed(before, after))
    with pytest.raises(SettingsError, match=sentence) as caught:
        read_case(path)
    message = str(caught.value)
    assert str(path) in message
    assert "\n" not in message
    assert len(message) < len(str(path)) + 300
    for jargon in ("pydantic", "Value error", "tuple", "dictionary", "instance", "Input"):
        assert jargon not in message


def test_a_case_without_windows_is_refused(written):
    head = GOOD.split("[[window]]")[0]
    with pytest.raises(SettingsError, match=r"no \[\[window\]\]; nothing can leave"):
        read_case(written(head))
    with pytest.raises(SettingsError, match=r"no \[\[window\]\]; nothing can leave"):
        read_case(written("window = []\n" + head))
    with pytest.raises(SettingsError, match=r"headed by \[\[window\]\]"):
        read_case(written("window = 3\n" + head))


@pytest.mark.parametrize(
    ("content", "sentence"),
    [
        (b"", r"\[surface\] is missing"),
        (b"\xff\xfe\x00", r"not a text file \(byte 0"),
        (b"ply\nformat binary_little_endian 1.0\n\x9c\x00", "not a text file"),
        (b"x" * 300_000, "larger than 256 kB"),
        (b"a=" + b"[" * 100_000, "nested too deeply"),
        (b"a=" + b"{a=" * 50_000, "nested too deeply"),
        (b"surface={unit=" + b"[" * 800 + b"]" * 800 + b"}", "nested too deeply"),
        (b".".join([b"a"] * 100_000) + b"=1", r"line 1 has 99999 dots \(limit 200\)"),
        (b"[[" + b".".join([b"a"] * 60_000) + b"]]", "line 1 has 59999 dots"),
    ],
    ids=range(9),
)
def test_what_is_no_case_file_is_refused_at_once(written, content, sentence):
    with pytest.raises(SettingsError, match=sentence):
        read_case(written(content))


def test_a_missing_file_a_folder_and_an_impossible_path_are_refused(tmp_path):
    with pytest.raises(SettingsError, match=r"there is no case file .*lost.toml"):
        read_case(tmp_path / "lost.toml")
    with pytest.raises(SettingsError, match="is a folder"):
        read_case(tmp_path)
    with pytest.raises(SettingsError, match="no case file"):
        read_case("\0")
    with pytest.raises(SettingsError, match="cannot be read"):
        read_case("x" * 5000)


def test_a_byte_order_mark_and_windows_line_ends_do_no_harm(written):
    assert read_case(written(b"\xef\xbb\xbf" + GOOD.replace("\n", "\r\n").encode())).name == "bouton"


def test_a_missing_mesh_file_is_named_with_what_its_path_is_relative_to(written):
    case = read_case(written(GOOD))
    with pytest.raises(SettingsError, match=r"\[surface\] file is 'tissue/bouton.ply'.*relative to the case"):
        case.load_surface()


def test_another_target_and_budget_leave_the_rest_of_the_case_alone(written):
    case = read_case(written(GOOD))
    other = case.with_accuracy(target=0.01)
    assert other.document.accuracy.target == 0.01
    assert other.document.accuracy.max_panels == 20000
    assert other.document.window == case.document.window
    assert case.with_accuracy(max_panels=500).document.accuracy.max_panels == 500
    with pytest.raises(SettingsError, match=r"\[accuracy\] max_panels is 3; it should be greater"):
        case.with_accuracy(max_panels=3)
    with pytest.raises(SettingsError, match=r"\[accuracy\] target is 2; it must lie between"):
        case.with_accuracy(target=2.0)


def test_the_published_schema_accepts_the_good_case_and_refuses_an_unknown_key():
    schema = case_schema()
    jsonschema.Draft202012Validator.check_schema(schema)
    table = tomllib.loads(GOOD)
    jsonschema.validate(table, schema)
    table["motion"]["difusion"] = "20 um^2/s"
    with pytest.raises(jsonschema.ValidationError, match="difusion"):
        jsonschema.validate(table, schema)


def test_solving_a_case_hands_every_entry_to_the_solver(written, monkeypatch):
    import sys
    from types import ModuleType

    @dataclass(frozen=True)
    class SolverSettings:
        max_panels: int = 60000

    @dataclass
    class Seen:
        positional: tuple = ()
        named: dict = field(default_factory=dict)

    seen = Seen()

    def solve_escape(*positional, **named):
        seen.positional, seen.named = positional, named
        return "the result"

    escape = ModuleType("bemescape.escape")
    escape.SolverSettings, escape.solve_escape = SolverSettings, solve_escape
    monkeypatch.setitem(sys.modules, "bemescape.escape", escape)
    surface = voxel_surface()
    monkeypatch.setattr(Case, "load_surface", lambda self, progress: surface)

    assert read_case(written(GOOD)).solve() == "the result"
    given_surface, windows, diffusion = seen.positional
    assert given_surface is surface
    assert [window.name for window in windows] == ["neck", "release face"]
    assert diffusion == 20.0
    assert seen.named["target"] == 0.002
    assert list(seen.named["start"]) == ["vesicle"]
    assert seen.named["name"] == "bouton"
    assert seen.named["settings"] == SolverSettings(max_panels=20000)


scalars = (
    st.none()
    | st.booleans()
    | st.integers()
    | st.floats()
    | st.text(max_size=8)
    | st.sampled_from(["60 nm", "20 um^2/s", "nm", "0.5 %", "auto"])
)
KNOWN = """surface motion window accuracy start file unit heal diffusion name disc labels centre radius array
value permeability target max_panels points near lid scatter point normal distance count density gap seed farthest
compact"""
keys = st.sampled_from(KNOWN.split()) | st.text(max_size=5)
tables = st.recursive(
    scalars,
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(keys, inner, max_size=4),
    max_leaves=25,
)


def refusal(read) -> str:
    """The sentence with which `read` refuses; empty if it gives a case. Other exceptions pass through."""
    try:
        assert isinstance(read(), Case)
    except SettingsError as error:
        return str(error)
    return ""


@settings(max_examples=300, deadline=None)
@given(st.dictionaries(keys, tables, max_size=6))
def test_any_table_is_a_case_or_refused_with_one_sentence(table):
    sentence = refusal(lambda: parse_case(table, folder=".", name="any"))
    assert "\n" not in sentence
    assert len(sentence) < 600


pieces = st.sampled_from(GOOD.split("\n") + list('[]{}="#.,\n') + ["[[window]]", "nan", "1e999", "'''", '"""'])


@settings(max_examples=200, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(st.lists(pieces | st.text(max_size=6), max_size=25), st.sampled_from(["\n", " ", ""]))
def test_any_text_is_a_case_or_refused_with_one_sentence(written, parts, joint):
    content = joint.join(parts).encode("utf-8", "replace")
    assert "\n" not in refusal(lambda: read_case(written(content)))
