"""Positions from CSV files: what is understood, and what is refused with its line."""

import numpy as np
import pytest

from bemescape.errors import SettingsError
from bemescape.windows.positions import read_positions

TWO = np.array([[0.001, 0.002, 0.003], [-0.004, 0.0005, 60.0]])


@pytest.fixture
def written(tmp_path):
    def write(content):
        path = tmp_path / "pores.csv"
        path.write_bytes(content if isinstance(content, bytes) else content.encode())
        return path

    return write


@pytest.mark.parametrize(
    "content",
    [
        "x,y,z\n1,2,3\n-4,0.5,6e4\n",
        "x,y,z\r\n1,2,3\r\n-4,.5,60000.\r\n",
        b"\xef\xbb\xbfx,y,z\n1,2,3\n-4,0.5,6e4",
        "x;y;z\n1;2;3\n-4;0.5;6e4\n",
        "x\ty\tz\n1\t2\t3\n-4\t0.5\t6e4\n",
        'id, Z ,x,"Y"\na,3,1,2\n\nb,6e4,-4,"0.5"\n',
        "# found by hand\nx,y,z,note\n1,2,3,\n-4,0.5,6e4,faint\n",
        "x [nm],y [nm],z [nm]\n1,2,3\n-4,0.5,6e4\n",
        "x_nm,y_nm,z_um\n1,2,0.003\n-4,0.5,60\n",
        "x,y,z\nnm,nm,nm\n1,2,3\n-4,0.5,6e4\n",
        "x,y,z,\n1,2,3,\n-4,0.5,6e4,\n",
    ],
    ids=range(11),
)
def test_columns_and_units_are_found(written, content):
    path = written(content)
    has_unit = any(unit in path.read_bytes() for unit in (b"nm",))
    places, lines = read_positions(path, unit=None if has_unit else "nm")
    np.testing.assert_allclose(places, TWO, rtol=1e-14)
    assert len(lines) == 2
    kept = path.read_bytes().decode("utf-8-sig").splitlines()
    assert all(str(number) in kept[line - 1] for number, line in zip((3, 5), lines, strict=True))


def test_the_unit_of_the_mesh_file_serves_where_nothing_else_says_one(written):
    path = written("x,y,z\n1,2,3\n")
    np.testing.assert_allclose(
        read_positions(path, otherwise_um=np.array([0.004, 0.004, 0.04]))[0], [[0.004, 0.008, 0.12]]
    )
    np.testing.assert_allclose(read_positions(path, unit=["nm", "nm", "40 nm"])[0], [[0.001, 0.002, 0.12]])


@pytest.mark.parametrize(
    ("content", "sentence"),
    [
        ("x,y,z\n1,2,3\n", "does not say in which unit its positions are"),
        ("x,y\n1,2\n", r"line 1 has no column z but 'x, y'; the first row names"),
        ("1,2,3\n4,5,6\n", "line 1 has no column x or y or z but '1, 2, 3'"),
        ("x,y,z,X\n1,2,3,4\n", "names the column x twice"),
        ("x [nm],y,z\n1,2,3\n", "gives some of x, y and z a unit but not all"),
        ("x [nm],y [nm],z [pixels]\n1,2,3\n", "'pixels' is not a quantity in um"),
        ("x [nm],y [nm],z [nm]\n", "has a header but no positions"),
        ("", "is empty; it needs a header"),
        ("# nothing\n\n", "is empty; it needs a header"),
        ("x_nm,y_nm,z_nm\n1,2,3\n4,,6\n", "line 3 has no y; every row needs x, y and z"),
        ("x_nm,y_nm,z_nm\n1,2,3\n4,5\n", "line 3 has no z"),
        ("x_nm,y_nm,z_nm\n1,2,3\n4,nan,6\n", "line 3: y is 'nan', which is not a finite number"),
        ("x_nm,y_nm,z_nm\n1,2,inf\n", "line 2: z is 'inf', which is not a finite number"),
        ("x_nm,y_nm,z_nm\n1,2,1e999\n", "line 2: z is '1e999', which is not a finite number"),
        ("x_nm,y_nm,z_nm\n1,two,3\n", "line 2: y is 'two', which is not a finite number"),
        ("x_nm,y_nm,z_nm\n1,2,3_0\n", "line 2: z is '3_0', which is not a finite number"),
        ("x_nm;y_nm;z_nm\n1,5;2,5;3,5\n", "line 2: x is '1,5'; save it with decimal points, not commas"),
        ("x_nm,y_nm,z_nm\n1,5,2,5,3,5\n", "line 2 has 6 entries, but the header 3; if numbers have decimal commas"),
        ('x_nm,y_nm,z_nm\n"1,2,3\n', "is not a CSV file"),
        ("x_nm,y_nm,z_nm\n1,2,3\n".encode("utf-16"), "is not plain text"),
        (b"x_nm,y_nm,z_nm\n1,2,3\0\n", "is not plain text"),
        (b"\x93NUMPY\x01\x00v\x00", "is not plain text"),
    ],
    ids=range(22),
)
def test_what_cannot_be_read_is_refused_with_its_line(written, content, sentence):
    with pytest.raises(SettingsError, match=sentence) as caught:
        read_positions(written(content))
    assert "\n" not in str(caught.value)


def test_two_units_that_differ_are_refused(written):
    path = written("x,y,z\nnm,nm,nm\n1,2,3\n")
    assert len(read_positions(path, unit="nm")[0]) == 1
    with pytest.raises(SettingsError, match="says that its numbers are in nm, but the unit given is 'um'"):
        read_positions(path, unit="um")


def test_a_missing_file_and_a_folder_are_refused(tmp_path):
    for path in (tmp_path / "lost.csv", tmp_path, "\0"):
        with pytest.raises(SettingsError):
            read_positions(path, unit="nm")


def test_a_hundred_thousand_rows_are_read_in_seconds(written):
    random = np.random.default_rng(0).random((100_000, 3))
    path = written("x,y,z\n" + "\n".join(",".join(map(repr, row)) for row in random.tolist()))
    places, lines = read_positions(path, unit="um")
    np.testing.assert_array_equal(places, random)
    assert lines[-1] == 100_001
