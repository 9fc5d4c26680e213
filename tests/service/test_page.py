"""The page without a browser: colour maps, the bundle, and the pure modules under node."""

import hashlib
import re
import shutil
import subprocess
from importlib.resources import files
from pathlib import Path

import pytest
from matplotlib import colormaps

PAGE = Path(str(files("bemescape.service.page")))
HERE = Path(__file__).parent


def test_the_colour_maps_are_matplotlibs():
    text = (PAGE / "maps.js").read_text()
    for name, steps in (("cividis", (0, 255)), ("magma", (0.12 * 255, 0.97 * 255))):
        block = text.split(f"export const {name} =")[1].split(";")[0]
        table = bytes.fromhex("".join(re.findall(r'"([0-9a-f]*)"', block)))
        assert len(table) == 768
        for k in (0, 100, 255):
            where = steps[0] + (steps[1] - steps[0]) * k / 255
            expected = [round(255 * part) for part in colormaps[name](where / 255)[:3]]
            # Between two entries of matplotlib's table the nearest one is taken.
            assert max(abs(a - b) for a, b in zip(expected, table[3 * k : 3 * k + 3], strict=True)) <= 3


def test_the_bundle_is_the_one_whose_checksum_is_committed():
    bundle = (PAGE / "vendor" / "three_bundle.js").read_bytes()
    assert hashlib.sha256(bundle).hexdigest() == (PAGE / "vendor" / "three_bundle.sha256").read_text().split()[0]
    for licence in ("three.LICENSE.txt", "three-mesh-bvh.LICENSE.txt"):
        assert "MIT" in (PAGE / "vendor" / licence).read_text()


def test_no_file_of_the_page_asks_another_host():
    for path in [*PAGE.glob("*.js"), *PAGE.glob("*.html"), *PAGE.glob("*.css")]:
        found = re.findall(r"https?://[^\"'`\s]+", path.read_text())
        # The name that SVG elements are made under; it is compared, never asked for.
        assert set(found) <= {"http://www.w3.org/2000/svg"}, (path.name, found)


def test_every_module_that_is_imported_is_there_and_served(client):
    for path in PAGE.glob("*.js"):
        for target in re.findall(r'from "\./([^"]+)"', path.read_text()):
            answer = client.get(f"/{target}")
            assert answer.status_code == 200, (path.name, target)
            assert "javascript" in answer.headers["content-type"]


def test_the_pure_modules_under_node():
    node = shutil.which("node")
    if node is None:
        pytest.skip("node is not installed")
    version = [int(part) for part in subprocess.check_output([node, "--version"], text=True)[1:].split(".")[:2]]
    if version < [20, 19]:
        pytest.skip("this node does not see by itself that a file is a module")
    done = subprocess.run(
        [node, "--test", str(HERE / "page")], capture_output=True, text=True, timeout=120, check=False
    )
    assert done.returncode == 0, done.stdout[-3000:]
