"""Laws of the report that need no browser: what it is made from, what it says, what cannot break out."""

from __future__ import annotations

import base64
import hashlib
import io
import json
import re
import shutil
import zlib
from collections.abc import Callable
from dataclasses import replace
from html.parser import HTMLParser
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
from matplotlib import colormaps
from matplotlib.colors import to_rgb
from PIL import Image
from typer.testing import CliRunner

from stillground.cli.app import app
from stillground.errors import ResultError
from stillground.products.figures.badges import BADGES
from stillground.products.provenance import CAUTION
from stillground.products.report import write_comparison, write_report
from stillground.products.report.comparison import common
from stillground.products.report.encoding import coarser, pack
from stillground.products.report.folder import read_results
from stillground.products.report.ground import ground_of
from stillground.products.report.history import pictures
from stillground.protocols import GroundProperty, Result

from .made_up_folders import GROUND, USUAL, column_of, stretched, write_folder
from .made_up_results import SURFACE, slowness

# Every string of it came from a file: it must be told as it is, and do nothing.
EVIL = (
    "</script><script>window.hurt=1</script><img src=x onerror='window.hurt=1'> \"quoted\" & 'more' {{ 7*7 }}"
)


class Text(HTMLParser):
    """What a reader sees, and which elements carry what attributes."""

    def __init__(self, page: str) -> None:
        super().__init__()
        self.words: list[str] = []
        self.elements: list[tuple[str, dict[str, str | None]]] = []
        self._hidden = 0
        self.feed(page)

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.elements.append((tag, dict(attrs)))
        self._hidden += tag in ("script", "style")

    def handle_endtag(self, tag: str) -> None:
        self._hidden -= tag in ("script", "style")

    def handle_data(self, data: str) -> None:
        if not self._hidden:
            self.words.append(data)

    @property
    def text(self) -> str:
        return " ".join(" ".join(self.words).split())


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory, result: Result) -> Path:
    return write_folder(tmp_path_factory.mktemp("report"), {"crosshole-ab": result}, surface=SURFACE)


@pytest.fixture(scope="module")
def page(folder: Path) -> str:
    return write_report(folder).read_text(encoding="utf-8")


def unpacked(text: str, about: dict[str, Any]) -> np.ndarray:
    """The encoding as it is documented, read back with general libraries."""
    raw = np.frombuffer(zlib.decompress(base64.b64decode(text)), np.uint8).astype(np.int64)
    if about["bytes"] == 2:
        high, low = raw.reshape(2, -1)
        raw = high * 256 + low
    last = 256 ** about["bytes"]
    codes = np.cumsum(raw.reshape(about["count"], about["nz"], about["nx"]), axis=-1) % last
    low, high = (np.array(about[end])[:, None, None] for end in ("low", "high"))
    return np.where(codes == 0, np.nan, low + (codes - 1) * (high - low) / (last - 2))


@pytest.mark.parametrize(("n_bytes", "codes"), [(1, 254), (2, 65534)])
def test_fields_come_back_within_half_a_code(n_bytes: int, codes: int) -> None:
    stack = np.random.default_rng(5).normal(1800, 200, (3, 7, 11))
    stack[1, 2:4, 5] = np.nan
    stack[2] = 4.0
    packed = pack(stack, n_bytes)
    back = unpacked(packed.text, packed.about)
    assert np.array_equal(np.isnan(back), np.isnan(stack))
    step = (np.nanmax(stack[:2], axis=(1, 2)) - np.nanmin(stack[:2], axis=(1, 2))) / codes
    assert np.nanmax(np.abs(back[:2] - stack[:2]) / step[:, None, None]) <= 0.501
    np.testing.assert_array_equal(back[2], 4.0)


def test_coarser_fields_keep_the_extent_and_what_is_bilinear() -> None:
    down, across = np.meshgrid(np.linspace(0, 1, 8), np.linspace(0, 1, 13), indexing="ij")
    stack = np.array([2 + 3 * down - across + 0.5 * down * across])
    half = coarser(stack)
    assert half.shape == (1, 4, 7)
    at = np.meshgrid(np.linspace(0, 1, 4), np.linspace(0, 1, 7), indexing="ij")
    np.testing.assert_allclose(half[0], 2 + 3 * at[0] - at[1] + 0.5 * at[0] * at[1], atol=1e-12)


def test_picks_are_told_exactly_and_come_in_order(folder: Path, result: Result) -> None:
    (profile,) = read_results(folder).profiles
    ground = ground_of(profile)
    frames = pictures(profile, ground, 10**7)
    assert frames.note == ""
    assert np.all(np.diff(frames.iterations) > 0)
    expected = {choice.iteration for choice in result.choices} | {k for k, _ in result.snapshots}
    np.testing.assert_allclose(frames.iterations, sorted(expected))
    back = unpacked(frames.picked.text, frames.picked.about)
    x, z = np.meshgrid(profile.section["distance"], profile.section["elevation"])
    for choice in result.choices:
        frame = frames.picks[choice.rule]
        assert frames.iterations[frame] == pytest.approx(choice.iteration)
        truth = 1 / slowness(x, z, 1 - np.exp(-choice.iteration / 4))
        told = back[frames.frames[frame]["index"]]
        np.testing.assert_allclose(told[ground.inside], truth[ground.inside], atol=0.02)


def test_past_the_budget_pictures_between_picks_give_way_first(folder: Path) -> None:
    (profile,) = read_results(folder).profiles
    ground = ground_of(profile)
    whole = pictures(profile, ground, 10**7)
    half = pictures(profile, ground, whole.size - 1)
    assert "half resolution" in half.note
    assert (half.between.about["nz"], half.between.about["nx"]) == (61, 45)
    least = pictures(profile, ground, 1)
    assert "every 64th" in least.note
    assert "values at picks are rounded" in least.note
    for frames in (whole, half, least):
        n_between = sum(frame["stack"] == "between" for frame in frames.frames)
        assert n_between == frames.between.about["count"] == (1 if frames is least else 6)
    assert (whole.picked.about["bytes"], least.picked.about["bytes"]) == (2, 1)
    assert half.picked.text == whole.picked.text


def test_a_grid_finer_than_a_screen_is_thinned_and_the_page_says_so(
    folder: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("stillground.products.report.ground._MOST_NODES", 5000)
    (profile,) = read_results(folder).profiles
    ground = ground_of(profile)
    assert ground.frame.shape == ground.model.shape == ground.flags.shape == (61, 45)
    x, z = np.meshgrid(ground.frame.distance, ground.frame.elevation)
    # Every second node of an odd number: bilinear is exact there.
    np.testing.assert_allclose(ground.model[ground.inside], (1 / slowness(x, z))[ground.inside], rtol=1e-6)
    assert pictures(profile, ground, 10**7).picked.about["nx"] == 45
    assert "thinned" in Text(write_report(folder, folder / "thin").read_text(encoding="utf-8")).text


def test_the_same_files_give_the_same_page(folder: Path, page: str, tmp_path: Path) -> None:
    moved = shutil.copytree(folder, tmp_path / "by-mail")
    (moved / "report.html").unlink()
    assert write_report(moved).read_text(encoding="utf-8") == page
    elsewhere = write_report(moved, tmp_path / "out")
    assert elsewhere == tmp_path / "out" / "report.html"
    assert elsewhere.read_text(encoding="utf-8") == page
    assert str(tmp_path) not in page


def test_the_page_tells_all_that_the_summary_does(folder: Path, page: str, result: Result) -> None:
    text = Text(page).text
    for choice in result.choices:
        assert choice.pick.reason in text
    verdict = result.ladder.verdict
    for said in (
        "Settled",
        verdict.reason[1:],
        "0.065 %",
        CAUTION,
        *result.remarks,
        "3f2a" * 16,
        "stillground run osmere-weir.toml",
        'title = "Osmere Weir"',
        "numpy 2.0.0",
        "crosshole-ab_history.nc",
        "2 of 625 data count less than half",
        "source static",
        "from the prior",
        "lengths doubled",
        "spread 0.9",
        "expected 2",
        "of the rms anomaly",
        "300 µs, give or take 200 µs",
    ):
        assert said in text, said
    for rule, badge in BADGES.items():
        assert f'fill="{badge.colour}"' in page, rule


@pytest.mark.parametrize("word", ["settled", "drifting", "undecided"])
def test_a_verdict_hangs_on_shape_word_and_colour(
    make: Callable[..., Result], tmp_path: Path, word: str
) -> None:
    path = write_report(write_folder(tmp_path, {"ab": make(word=word, argued=False)}))
    page = path.read_text(encoding="utf-8")
    strip = page.split('<header class="verdict')[1].split("</header>")[0]
    assert f"<h2>{word.capitalize()}</h2>" in strip
    shape = {"settled": "<circle", "drifting": "M22 3L43 40H1Z", "undecided": "M22 1L43 22L22 43L1 22Z"}[word]
    assert shape in strip
    assert strip.count("<dt>") == 4


def test_nothing_from_a_file_becomes_markup_or_code(
    make: Callable[..., Result], result: Result, tmp_path: Path
) -> None:
    plain = make(argued=False)
    choices = tuple(
        replace(choice, rule=EVIL if i == 3 else choice.rule, pick=replace(choice.pick, reason=EVIL))
        for i, choice in enumerate(plain.choices)
    )
    hostile = replace(plain, choices=choices, remarks=(EVIL,))
    write_folder(tmp_path, {"ab": hostile}, title=EVIL, command=EVIL, config_text=EVIL)
    summary = json.loads((tmp_path / "summary.json").read_text(encoding="utf-8"))
    summary["profiles"][0]["name"] = EVIL
    (tmp_path / "summary.json").write_text(json.dumps(summary), encoding="utf-8")
    page = write_report(tmp_path).read_text(encoding="utf-8")
    read = Text(page)
    assert "window.hurt" in read.text, "it is told as text"
    assert "{{ 7*7 }}" in read.text, "and is no template"
    assert not [tag for tag, _ in read.elements if tag == "img"]
    assert not [name for _, attrs in read.elements for name in attrs if name.startswith("on")]
    # One script runs, the page's own; all others are data.
    kinds = [attrs.get("type") for tag, attrs in read.elements if tag == "script"]
    assert kinds.count(None) == 1
    assert set(kinds) == {None, "application/json", "text/plain"}
    for held in re.findall(r'<script type="application/json"[^>]*>(.*?)</script>', page, flags=re.DOTALL):
        json.loads(held)


def test_the_content_policy_names_exactly_the_script_and_style_that_are_there(page: str) -> None:
    policy = next(a["content"] for t, a in Text(page).elements if a.get("http-equiv")) or ""
    assert "default-src 'none'" in policy
    assert "unsafe" not in policy
    for kind, pattern in (("script", r"<script>(.*?)</script>"), ("style", r"<style>(.*?)</style>")):
        (held,) = re.findall(pattern, page, flags=re.DOTALL)
        digest = base64.b64encode(hashlib.sha256(held.encode()).digest()).decode()
        assert f"{kind}-src 'sha256-{digest}'" in policy
    # The policy would block these, so they must not be counted on.
    assert not [attrs for _, attrs in Text(page).elements if "style" in attrs]


def test_nothing_is_fetched_from_anywhere(page: str) -> None:
    for tag, attrs in Text(page).elements:
        for name in ("src", "href", "xlink:href", "action", "data", "poster", "srcset"):
            value = attrs.get(name)
            assert value is None or value.startswith(("#", "data:")), (tag, name, value[:80])
    style = page.split("<style>")[1].split("</style>")[0]
    assert "@import" not in style
    assert set(re.findall(r"url\((.*?)\)", style)) <= {"#hatch"}


def test_static_pictures_veil_what_is_not_reliable(folder: Path, page: str) -> None:
    (profile,) = read_results(folder).profiles
    ground = ground_of(profile)
    first = re.search(r'href="data:image/png;base64,([^"]+)"', page.split('<figure class="static">')[1])
    image = np.asarray(Image.open(io.BytesIO(base64.b64decode(first[1]))).convert("RGB"), float)
    height, width = image.shape[:2]
    x, z = profile.section["distance"].values, profile.section["elevation"].values

    def pixel(distance: float, elevation: float) -> np.ndarray:
        row = int((z[0] - elevation) / (z[0] - z[-1]) * height)
        return image[row, int((distance - x[0]) / (x[-1] - x[0]) * width)]

    low, high = ground.scale
    for distance, elevation in ((5.5, 53.0), (9.0, 48.0)):
        truth = 1 / slowness(np.array(distance), np.array(elevation))
        expected = 255 * np.array(colormaps["cividis"](np.clip((truth - low) / (high - low), 0, 1))[:3])
        np.testing.assert_allclose(pixel(distance, elevation), expected, atol=5)
    # No ray comes here: two thirds paper, or a line of the hatch.
    paper, hatch = 255 * np.array(to_rgb("#f6f4ee")), 255 * np.array(to_rgb("#7c858c"))
    value = 1 / slowness(np.array(9.0), np.array(34.6))
    colour = 255 * np.array(colormaps["cividis"](np.clip((value - low) / (high - low), 0, 1))[:3])
    seen = pixel(9.0, 34.6)
    veiled = 0.32 * colour + 0.68 * paper
    assert min(np.abs(seen - veiled).max(), np.abs(seen - hatch).max()) < 6
    # Above the surface there is nothing, and it reaches the surface without stairs.
    np.testing.assert_allclose(pixel(6.0, 63.6), 255 * np.array(to_rgb("#fffefb")), atol=1)
    assert np.abs(pixel(9.0, 62.9) - 255 * np.array(to_rgb("#fffefb"))).max() > 20


def test_a_column_has_a_curve_with_its_error_band(result: Result, tmp_path: Path) -> None:
    page = write_report(
        write_folder(tmp_path, {"sounding": column_of(result, 40)}, surface=GROUND, differences=USUAL)
    ).read_text(encoding="utf-8")
    text = Text(page).text
    assert "Column" in text
    static = page.split('<figure class="static">')[1].split("</figure>")[0]
    assert 'class="band"' in static
    assert "elevation (m)" in static
    assert "distance (m)" not in static
    assert static.count('class="usual"') == 2
    assert "Band: total error of velocity" in text
    assert "mean between stations: velocity" in text
    assert "row of the table" in text


def test_positions_in_a_column_have_the_signs_of_the_figures(result: Result, tmp_path: Path) -> None:
    folder = write_folder(tmp_path, {"sounding": column_of(result, 40)})
    fit = pd.read_csv(folder / "sounding_fit.csv")
    numbers, heights = np.arange(1, len(fit) + 1), np.linspace(40, 50, len(fit))
    fit.assign(**{"source": numbers, "source_elevation [m]": heights}).to_csv(
        folder / "sounding_fit.csv", index=False
    )
    text = Text(write_report(folder).read_text(encoding="utf-8")).text
    assert "Stars: source." in text


def test_groupings_come_by_name_and_may_be_missing(folder: Path, tmp_path: Path) -> None:
    moved = shutil.copytree(folder, tmp_path / "stations")
    fit = pd.read_csv(moved / "crosshole-ab_fit.csv")
    fit = fit.rename(columns={name: name.replace("source", "station") for name in fit.columns})
    fit.drop(columns=[name for name in fit.columns if "receiver" in name]).to_csv(
        moved / "crosshole-ab_fit.csv", index=False
    )
    text = Text(write_report(moved).read_text(encoding="utf-8")).text
    assert "Worst station, number 12" in text
    assert "Triangles: station." in text
    assert "receiver" not in text.split("Data fit")[2]


@pytest.mark.parametrize(
    ("damage", "told"),
    [
        (lambda f: (f / "summary.json").unlink(), "summary.json: there is no such file"),
        (lambda f: (f / "summary.json").write_text("{"), "summary.json: Invalid JSON"),
        (lambda f: (f / "summary.json").write_text('{"title": 3}'), "summary.json: title"),
        (lambda f: (f / "ab_history.nc").unlink(), "ab_history.nc: there is no such file"),
        (lambda f: (f / "ab_section.nc").write_bytes(b"CDF\x01 no"), "ab_section.nc: is no NetCDF file"),
        (lambda f: (f / "ab_fit.csv").write_text("row\n1\n"), "ab_fit.csv: holds no 'residual_over_error'"),
        (lambda f: shutil.copy(f / "ab_ladder.nc", f / "ab_history.nc"), "history.nc: holds no 'chi_square'"),
    ],
)  # fmt: skip
def test_a_damaged_folder_is_one_clear_message_and_nothing_written(
    make: Callable[..., Result], tmp_path: Path, damage: Callable[[Path], Any], told: str
) -> None:
    folder = write_folder(tmp_path, {"ab": make(argued=False, spacing=1.0)})
    damage(folder)
    with pytest.raises(ResultError, match=re.escape(told)):
        write_report(folder)
    assert not (folder / "report.html").exists()
    assert not list(folder.glob(".*"))


def test_a_file_outside_the_folder_is_refused(make: Callable[..., Result], tmp_path: Path) -> None:
    folder = write_folder(tmp_path / "in", {"ab": make(argued=False, spacing=1.0)})
    shutil.move(folder / "ab_fit.csv", tmp_path / "ab_fit.csv")
    text = (folder / "summary.json").read_text().replace("ab_fit.csv", "../ab_fit.csv")
    (folder / "summary.json").write_text(text)
    with pytest.raises(ResultError, match="outside the folder"):
        write_report(folder)


def test_two_results_are_compared_on_their_common_ground(make: Callable[..., Result], tmp_path: Path) -> None:
    # The second starts 1 m further east, on a coarser grid: the same picture at other places.
    one = write_folder(tmp_path / "one", {"ab": make(argued=False)})
    other = write_folder(tmp_path / "other", {"ab": make(argued=False, spacing=0.5)}, shift=1.0)
    (first,), (second,) = read_results(one).profiles, read_results(other).profiles
    both = common(first, second)
    frame = both.first.frame
    assert (frame.distance[0], frame.distance[-1]) == (-1.0, 20.0)
    assert np.diff(frame.distance) == pytest.approx(0.25)
    x, z = np.meshgrid(frame.distance, frame.elevation)
    np.testing.assert_allclose(both.first.model, 1 / slowness(x, z), rtol=1e-6)
    # Bilinear between nodes 0.5 m apart: second order, largest where the lens is sharpest.
    np.testing.assert_allclose(both.second, 1 / slowness(x - 1, z), atol=15)
    at_nodes = both.second[::2, 4::2] - 1 / slowness(x - 1, z)[::2, 4::2]
    assert np.abs(at_nodes).max() < 0.01
    np.testing.assert_array_equal(both.difference, both.second - both.first.model)
    text = Text(write_comparison(one, other, tmp_path / "out").read_text(encoding="utf-8")).text
    assert "B less A" in text
    assert "one" in text.split("against")[0]


def test_a_comparison_says_where_nothing_is_reliable_in_both(
    make: Callable[..., Result], tmp_path: Path
) -> None:
    seen = make(argued=False, spacing=1.0)
    unseen = replace(seen, coverage=replace(seen.coverage, values=np.zeros_like(seen.coverage.values)))
    folders = [write_folder(tmp_path / name, {"ab": one}) for name, one in (("one", seen), ("other", unseen))]
    text = Text(write_comparison(*folders, tmp_path / "out").read_text(encoding="utf-8")).text
    assert "No ground is reliable in both; over all that both have the pictures differ by 0 m" in text
    text = Text(write_comparison(folders[0], folders[0], tmp_path / "out").read_text(encoding="utf-8")).text
    assert "Over the ground that is reliable in both, the pictures differ by 0 m" in text


def test_pure_numbers_have_no_unit(make: Callable[..., Result], tmp_path: Path) -> None:
    result = make(argued=False, spacing=1.0)
    result = replace(result, property=GroundProperty("water_content", "1", "water content"))
    folder = write_folder(tmp_path / "one", {"ab": result})
    page = write_report(folder).read_text(encoding="utf-8")
    compared = write_comparison(folder, folder, tmp_path / "out").read_text(encoding="utf-8")
    assert "water content (1)" not in page + compared
    assert "B less A (1)" not in compared
    assert "differ by 0 (rms)" in Text(compared).text
    assert '"units": "1"' not in page + compared


def test_what_practice_reads_off_is_drawn_within_the_frame_and_the_rest_is_counted(
    result: Result, tmp_path: Path
) -> None:
    far = replace(USUAL, values=np.array([1 / 1e5, USUAL.values[1]]))
    folder = write_folder(tmp_path, {"sounding": column_of(result, 40)}, surface=GROUND, differences=far)
    page = write_report(folder).read_text(encoding="utf-8")
    static = page.split('<figure class="static">')[1].split("</figure>")[0]
    assert static.count('class="usual"') == 1
    assert "; 1 of 2 lie beyond the frame" in Text(page).text


def test_the_command_compares_two_folders(
    make: Callable[..., Result], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    result = make(argued=False, spacing=1.0)
    folders = [str(write_folder(tmp_path / name, {"ab": result})) for name in ("one", "other")]
    done = CliRunner().invoke(app, ["report", *folders])
    assert done.exit_code == 0, done.output
    assert done.output.strip() == str(Path("results") / "comparison" / "report.html")
    assert "B less A" in (tmp_path / "results" / "comparison" / "report.html").read_text(encoding="utf-8")


@pytest.mark.parametrize(
    ("second", "told"),
    [
        ({"cd": {}}, "no profile has the same name"),
        ({"ab": {"shift": 500.0}}, "do not overlap"),
        ({"ab": {"north": True}}, "not one line"),
    ],
)
def test_results_that_do_not_compare_are_told_why(
    make: Callable[..., Result], tmp_path: Path, second: dict[str, dict[str, Any]], told: str
) -> None:
    result = make(argued=False, spacing=1.0)
    one = write_folder(tmp_path / "one", {"ab": result})
    ((name, options),) = second.items()
    other = write_folder(tmp_path / "other", {name: result}, **options)
    with pytest.raises(ResultError, match=told):
        write_comparison(one, other, tmp_path / "out")
    assert not (tmp_path / "out").exists()


def test_a_flat_section_is_drawn_with_heights_exaggerated(result: Result, tmp_path: Path) -> None:
    page = write_report(write_folder(tmp_path, {"line": stretched(result, 10)})).read_text(encoding="utf-8")
    assert "distance (m), heights × 2" in Text(page).text
