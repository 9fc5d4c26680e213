"""The cache of compiled functions on disk, filled by several processes; numba's own classes are the reference."""

import ast
from pathlib import Path

import pytest
from numba.core.caching import IndexDataCacheFile

import bemescape
from bemescape import compiled


def two_at_once(kind, folder):
    """One saves its variant while another, which read the index earlier, saves a different one in between."""
    mine, other, reader = (kind(str(folder), "run-1", "stamp") for _ in range(3))
    read_earlier = mine._load_index()
    mine._load_index = lambda: dict(read_earlier)
    save_data = other._save_data
    other._save_data = lambda name, data: (mine.save("variant 1", "code 1"), save_data(name, data))
    other.save("variant 2", "code 2")
    return reader.load("variant 1"), reader.load("variant 2")


def test_two_processes_that_compile_different_variants_never_get_each_others_code(tmp_path):
    one, two = two_at_once(compiled.NamedByContent, tmp_path)
    assert one in ("code 1", None)
    assert two in ("code 2", None)
    assert (one, two) != (None, None)


def test_code_of_an_earlier_source_is_never_found_under_a_new_index(tmp_path):
    old = compiled.NamedByContent(str(tmp_path), "run-1", "stamp of yesterday")
    old.save("variant", "old code")
    new, reader = (compiled.NamedByContent(str(tmp_path), "run-1", "stamp of today") for _ in range(2))
    seen = []
    save_index, save_data = new._save_index, new._save_data
    new._save_index = lambda overloads: (save_index(overloads), seen.append(reader.load("variant")))
    new._save_data = lambda name, data: (save_data(name, data), seen.append(reader.load("variant")))
    new.save("variant", "new code")
    assert set(seen) <= {None, "new code"}
    assert seen[-1] == "new code"


def test_numba_itself_does_mix_them_up(tmp_path):
    """If this fails, numba has mended it, and `compiled` may go."""
    assert two_at_once(IndexDataCacheFile, tmp_path)[0] == "code 2"


@pytest.mark.parametrize("path", sorted(Path(bemescape.__file__).parent.rglob("*.py")), ids=lambda path: path.stem)
def test_every_compiled_function_has_this_cache(path):
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.ImportFrom) and node.module == "numba":
            assert not {name.name for name in node.names} & {"njit", "jit"}


def test_the_cache_of_a_compiled_function_is_this_one():
    from bemescape.bem.near import near_panels

    assert type(near_panels._cache._cache_file) is compiled.NamedByContent
