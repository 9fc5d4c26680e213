import dataclasses
import re
from html.parser import HTMLParser
from types import SimpleNamespace

import pytest
from matplotlib.figure import Figure

from bemescape.errors import SettingsError
from bemescape.viz import write_report


class Reader(HTMLParser):
    """Collects tags, links and text, and that every opened tag is closed."""

    VOID = frozenset({"meta", "img"})

    def __init__(self):
        super().__init__()
        self.open, self.tags, self.sources, self.text = [], [], [], []

    def handle_starttag(self, tag, attrs):
        self.tags.append(tag)
        self.sources += [value for key, value in attrs if key in {"src", "href", "srcset", "action"}]
        self.sources += [key for key, _ in attrs if key.startswith("on")]
        if tag not in self.VOID:
            self.open.append(tag)

    def handle_endtag(self, tag):
        assert self.open.pop() == tag

    def handle_data(self, data):
        self.text.append(data)


def read(path):
    reader = Reader()
    reader.feed(path.read_text(encoding="utf-8"))
    reader.close()
    assert reader.open == []
    return reader, " ".join(" ".join(reader.text).split())


@pytest.fixture(scope="module")
def small_pictures(tmp_path_factory):
    folder = tmp_path_factory.mktemp("small")
    names = ("view_front", "view_side", "view_top", "cutaway", "windows", "spread", "convergence")
    for name in names:
        Figure(figsize=(1, 1)).savefig(folder / f"{name}.png")
    return [folder / f"{name}.png" for name in names]


@pytest.fixture
def report(spine, small_pictures, tmp_path):
    return write_report(spine, tmp_path / "report.html", pictures=small_pictures)


def test_a_report_is_one_file_that_loads_nothing(report):
    reader, _ = read(report)
    assert reader.tags.count("img") == 7
    assert all(source.startswith("data:image/png;base64,") for source in reader.sources)
    assert "script" not in reader.tags
    text = report.read_text(encoding="utf-8")
    assert "http://" not in text
    assert "https://" not in text
    assert "@import" not in text
    assert "url(" not in text


def test_a_report_carries_its_cautions_word_for_word(report):
    _, text = read(report)
    assert "Research tool. Times scale with D and the segmentation; not for clinical or dosing decisions." in text
    assert "Follow local rules and licensed practice." in text


def test_a_report_states_the_numbers_with_units_and_errors(report):
    _, text = read(report)
    for piece in (
        "12.340 ± 0.038 ms",
        "(milliseconds) on average",
        "0.31 %",
        "20 µm²/s",
        "The target of 0.5 % was met",
        "perfectly absorbing",
        "70 %",
        "release site",
        "V / (4 D Σa)",
        "2.10e-05",
        "ab" * 32,
        "bemescape 0.1.0",
        "1 debris part was dropped",
        "Healing changed nothing",
    ):
        assert piece in text, piece


def test_a_missed_target_is_said_in_the_headline(make_spine, small_pictures, tmp_path):
    missed = make_spine(target_met=False)
    _, text = read(write_report(missed, tmp_path / "r.html", pictures=small_pictures))
    assert "The target of 0.5 % was NOT met" in text


def test_permeability_and_second_opinion_are_listed_where_they_exist(make_spine, small_pictures, tmp_path):
    result = make_spine()
    opinion = SimpleNamespace(statement="agrees with a Galerkin solution within 1.20%")
    checks = result.summary.checks.model_copy(update={"crosscheck": opinion})
    windows = [result.summary.windows[0].model_copy(update={"permeability_um_s": 12.5})]
    result.__dict__["summary"] = result.summary.model_copy(
        update={"checks": checks, "windows": windows, "escape_time_sd_s": 0.0131}
    )
    _, text = read(write_report(result, tmp_path / "r.html", pictures=small_pictures))
    assert "12.5 µm/s" in text
    assert "Second opinion: agrees with a Galerkin solution within 1.20%." in text
    assert "13.1 ms" in text
    assert "leaves through its window neck" in text


def test_health_and_healing_are_told_line_by_line(make_spine, small_pictures, tmp_path):
    told = make_spine(
        health=SimpleNamespace(lines=lambda: ["closed: no", "2 open edges at <(0, 1, 2)>"]),
        healing=SimpleNamespace(lines=lambda: ["closed 1 hole of 4 edges"]),
    )
    reader, text = read(write_report(told, tmp_path / "r.html", pictures=small_pictures))
    assert "2 open edges at <(0, 1, 2)>" in text
    assert "closed 1 hole of 4 edges" in text
    assert "Healing changed nothing" not in text
    assert reader.tags.count("li") >= 5


@pytest.mark.parametrize(
    "name", ["<script>alert(1)</script>", '"><img src=x onerror=alert(1)>', "$name ${body} $$", "a & b"]
)
def test_names_cannot_write_html(make_spine, small_pictures, tmp_path, name):
    hostile = make_spine(
        name=name,
        names=(name, "side pore"),
        start={name: 0.014},
        notes=(name,),
        settings={name: name},
    )
    path = write_report(hostile, tmp_path / "r.html", pictures=small_pictures)
    reader, text = read(path)
    assert "script" not in reader.tags
    assert reader.tags.count("img") == 7
    assert all(source.startswith("data:image/png;base64,") for source in reader.sources)
    assert text.count(" ".join(name.split())) >= 5


def test_a_long_list_of_windows_is_cut_with_a_hint(make_ball, small_pictures, tmp_path):
    ball = make_ball()
    many = dataclasses.replace(ball, windows=ball.windows * 90)
    _, text = read(write_report(many, tmp_path / "r.html", pictures=small_pictures))
    assert "The 30 with the largest and the 30 with the smallest shares of 90; summary.json has all." in text


def test_text_is_readable_in_light_and_in_dark(report):
    """Contrast ratio of WCAG 2.1, at least 4.5 for ordinary text (success criterion 1.4.3)."""
    style = report.read_text(encoding="utf-8")
    light, dark = (
        dict(re.findall(r"--([a-z-]+): (#[0-9a-f]{6})", block))
        for block in (
            style[style.index(":root") : style.index("@media")],
            style[style.index("@media") :][:600],
        )
    )
    for colours in (light, dark):
        for front, back in (
            ("ink", "page"),
            ("soft", "page"),
            ("soft", "card"),
            ("ink", "card"),
            ("accent", "page"),
            ("ink", "warn"),
        ):
            assert contrast(colours[front], colours[back]) >= 4.5, (front, back)


def contrast(first, second):
    def luminance(colour):
        parts = [int(colour[k : k + 2], 16) / 255.0 for k in (1, 3, 5)]
        linear = [c / 12.92 if c <= 0.04045 else ((c + 0.055) / 1.055) ** 2.4 for c in parts]
        return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]

    bright, dark = sorted((luminance(first), luminance(second)), reverse=True)
    return (bright + 0.05) / (dark + 0.05)


def test_a_report_that_cannot_be_written_is_refused_in_a_sentence(spine, small_pictures, tmp_path):
    with pytest.raises(SettingsError, match=r"cannot be written.*name another place"):
        write_report(spine, tmp_path / "nowhere" / "r.html", pictures=small_pictures)
