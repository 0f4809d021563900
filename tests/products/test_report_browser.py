"""Laws of the report in a browser: headless Chromium through WebDriver, one session for all."""

from __future__ import annotations

import base64
import io
import json
import re
import shutil
import time
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pypdf
import pytest
from matplotlib import colormaps
from matplotlib.colors import to_rgb
from PIL import Image
from skimage.color import deltaE_ciede2000, rgb2lab

from stillground.products.figures.badges import BADGES
from stillground.products.report import write_comparison, write_report
from stillground.protocols import Result

from .made_up_folders import GROUND, USUAL, column_of, write_folder
from .made_up_results import SURFACE, bent, bent_rays, make_result, slowness

CHROMIUM, DRIVER = shutil.which("chromium"), shutil.which("chromedriver")
pytestmark = pytest.mark.skipif(
    not (CHROMIUM and DRIVER),
    reason="needs Debian's chromium and chromium-driver: apt-get install chromium chromium-driver",
)

HEADINGS = (
    "Settled",
    "Where each rule would stop",
    "The picture at each pick",
    "Refinement ladder",
    "Data fit",
    "Error bars and coverage",
    "Rehearsal: which rule to trust here",
    "Other settings",
    "Cautions and remarks",
    "Provenance and files",
)
WIDE = {"width": 1366, "height": 768, "deviceScaleFactor": 1, "mobile": False}


class Browser:
    """One Chromium, and what these tests ask of it."""

    def __init__(self, folder: Path) -> None:
        from selenium import webdriver
        from selenium.webdriver.chrome.options import Options
        from selenium.webdriver.chrome.service import Service

        options = Options()
        options.binary_location = str(CHROMIUM)
        for argument in (
            "--headless", "--no-sandbox", "--disable-gpu", "--no-first-run", "--hide-scrollbars",
            "--disable-background-networking", "--disable-component-update", "--disable-sync",
            f"--user-data-dir={folder}", "--window-size=1366,768",
        ):  # fmt: skip
            options.add_argument(argument)
        options.set_capability("goog:loggingPrefs", {"browser": "ALL", "performance": "ALL"})
        self.driver = webdriver.Chrome(options=options, service=Service(DRIVER))
        self.devtools("Network.enable")

    def devtools(self, command: str, **arguments: Any) -> Any:
        return self.driver.execute_cdp_cmd(command, arguments)

    def run(self, script: str, *arguments: Any) -> Any:
        return self.driver.execute_script(script, *arguments)

    def open(self, path: Path, ready: str = "yes") -> Browser:
        self.devtools("Emulation.setDeviceMetricsOverride", **WIDE)
        for log in ("browser", "performance"):
            self.driver.get_log(log)
        self.driver.get(path.resolve().as_uri())
        for _ in range(500):
            found = self.run("return document.documentElement.dataset.ready")
            if found:
                assert found == ready, self.console()
                return self
            time.sleep(0.02)
        raise AssertionError("the page is not ready in ten seconds")

    def console(self) -> list[str]:
        return [entry["message"] for entry in self.driver.get_log("browser")]

    def requests(self) -> list[str]:
        messages = [json.loads(entry["message"])["message"] for entry in self.driver.get_log("performance")]
        asked = ("Network.requestWillBeSent", "Network.webSocketCreated", "Network.webTransportCreated")
        return [
            message["params"].get("request", message["params"]).get("url", "")
            for message in messages
            if message["method"] in asked
        ]

    def state(self) -> dict[str, Any]:
        state: dict[str, Any] = self.run("return window.report.state()")
        return state

    def settle(self) -> None:
        """Waits until the next picture is drawn."""
        self.driver.execute_async_script(
            "const done = arguments[0]; requestAnimationFrame(() => requestAnimationFrame(() => done()))"
        )

    def part(self, name: str) -> Any:
        return self.driver.find_element("css selector", f'article:not([hidden]) [data-part="{name}"]')

    def set(self, name: str, value: object, event: str = "input") -> None:
        self.run(
            "const e = arguments[0]; if (e.type === 'checkbox') e.checked = arguments[1]; "
            "else e.value = arguments[1]; e.dispatchEvent(new Event(arguments[2]))",
            self.part(name),
            value,
            event,
        )
        self.settle()

    def point_at(self, node: tuple[int, int]) -> None:
        """Moves the pointer over a node."""
        self.run(
            "const map = window.report.map || window.report.maps[0], [x, y] = map.nodeXY(arguments[0]),"
            "box = map.host.getBoundingClientRect(), at = {clientX: box.left + x, clientY: box.top + y};"
            "map.host.dispatchEvent(new PointerEvent('pointermove', at))",
            list(node),
        )

    def canvas(self) -> np.ndarray:
        """The pixels of the picture alone, shape (height, width, 4)."""
        text, width, height = self.run(
            "const c = document.querySelector('article:not([hidden]) .map canvas'),"
            "[w, h, left, top] = window.report.state().box,"
            "d = c.getContext('2d').getImageData(left, top, Math.round(w), Math.round(h));"
            "let s = ''; for (let i = 0; i < d.data.length; i += 8192)"
            "s += String.fromCharCode(...d.data.subarray(i, i + 8192));"
            "return [btoa(s), d.width, d.height]"
        )
        return np.frombuffer(base64.b64decode(text), np.uint8).reshape(height, width, 4).astype(float)

    def screenshot(self) -> np.ndarray:
        data = self.devtools("Page.captureScreenshot", format="png")["data"]
        return np.asarray(Image.open(io.BytesIO(base64.b64decode(data))).convert("RGB"), float)

    def pdf(self) -> pypdf.PdfReader:
        printed = self.devtools("Page.printToPDF", printBackground=True, preferCSSPageSize=True)
        return pypdf.PdfReader(io.BytesIO(base64.b64decode(printed["data"])))


@pytest.fixture(scope="module")
def browser(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Browser]:
    one = Browser(tmp_path_factory.mktemp("chromium"))
    yield one
    one.driver.quit()


@pytest.fixture(scope="module")
def path(tmp_path_factory: pytest.TempPathFactory, result: Result) -> Path:
    folder = tmp_path_factory.mktemp("report")
    return write_report(write_folder(folder, {"crosshole-ab": result}, surface=SURFACE))


@pytest.fixture
def page(browser: Browser, path: Path) -> Browser:
    return browser.open(path)


def expected(at: float, axes: tuple[np.ndarray, np.ndarray]) -> np.ndarray:
    return np.asarray(1 / slowness(*axes, 1 - np.exp(-at / 4)))


def nodes(browser: Browser) -> tuple[np.ndarray, np.ndarray]:
    frame = browser.run("return window.report.about.frame")
    return (
        np.linspace(*frame["distance"], frame["nx"]),
        np.linspace(*frame["elevation"], frame["nz"]),
    )


def test_it_asks_for_nothing_and_says_nothing(page: Browser, path: Path) -> None:
    assert {url.partition(":")[0] for url in page.requests() if url != path.resolve().as_uri()} <= {"data"}
    assert page.console() == []


def test_the_policy_stops_what_would_fetch(page: Browser) -> None:
    stopped = page.driver.execute_async_script(
        "const done = arguments[0];"
        "document.addEventListener('securitypolicyviolation', e => done(e.effectiveDirective));"
        "fetch('http://127.0.0.1:9/').catch(() => {})"
    )
    assert stopped == "connect-src"


def test_pixels_are_the_colours_of_the_function(page: Browser) -> None:
    x, z = nodes(page)
    low, high = page.run("return window.report.about.scale")
    iterations = page.run("return window.report.about.iterations")
    # Picked and unpicked frames. Eight bits over a frame's range and bilinear nodes: a few colours.
    for at in (0, 5, 9, 13.4, 25):
        frame = int(np.argmin(np.abs(np.array(iterations) - at)))
        page.set("slider", frame)
        assert page.state()["iteration"] == pytest.approx(at)
        pixels = page.canvas()
        height, width = pixels.shape[:2]
        for distance, elevation in ((3.9, 53.0), (14.1, 45.5), (12.5, 47.0), (9.0, 41.0), (3.0, 58.0)):
            row = int((z[0] - elevation) / (z[0] - z[-1]) * height)
            column = int((distance - x[0]) / (x[-1] - x[0]) * width)
            centre = (
                x[0] + (column + 0.5) / width * (x[-1] - x[0]),
                z[0] - (row + 0.5) / height * (z[0] - z[-1]),
            )
            value = expected(at, centre)
            colour = 255 * np.array(colormaps["cividis"](np.clip((value - low) / (high - low), 0, 1))[:3])
            np.testing.assert_allclose(pixels[row, column, :3], colour, atol=4, err_msg=f"{at} {centre}")
            assert pixels[row, column, 3] == 255


def test_the_readout_tells_the_value_of_the_file(page: Browser) -> None:
    x, z = nodes(page)
    pins = {rule["name"]: rule["frame"] for rule in page.run("return window.report.rules")}
    for rule, at in (("gcv", 9.0), ("whiteness", 11.0)):
        page.set("slider", pins[rule])
        for node in ((44, 30), (80, 58)):
            page.point_at(node)
            state = page.state()
            assert state["probe"] == list(node)
            truth = expected(at, (x[node[1]], z[node[0]]))
            assert state["value"] == pytest.approx(truth, abs=0.02)
            told = page.run("return arguments[0].textContent", page.part("readout"))
            assert f"{truth:.5g}" in told.replace("−", "-") or f"{truth:.4g}" in told
            assert "m\N{NO-BREAK SPACE}s⁻¹" in told
    page.set("slider", 1)
    page.point_at((44, 30))
    assert "display rounding" in page.run("return arguments[0].textContent", page.part("readout"))
    page.point_at((0, 30))
    assert "above the surface" in page.run("return arguments[0].textContent", page.part("readout"))


def test_every_rule_leads_to_its_pick(page: Browser, result: Result) -> None:
    assert page.state()["iteration"] == result.chosen.iteration
    buttons = page.driver.find_elements("css selector", "button.rule")
    assert len(buttons) == len(result.choices) == len(BADGES)
    for button, choice in zip(buttons, result.choices, strict=True):
        page.run("arguments[0].click()", button)
        assert page.state()["iteration"] == pytest.approx(choice.iteration)
        assert button.get_attribute("aria-pressed") == "true"
        said = page.part("slider").get_attribute("aria-valuetext")
        assert choice.rule in said
    marks = page.run("return arguments[0].querySelectorAll('use').length", page.part("marks"))
    assert marks == len(result.choices)


def test_hovering_a_rule_previews_it(page: Browser) -> None:
    from selenium.webdriver.common.action_chains import ActionChains

    before = page.state()["iteration"]
    row = page.driver.find_element("css selector", "tr[data-rule=badge-4] td.n")
    ActionChains(page.driver).move_to_element(row).perform()
    assert page.state()["iteration"] == 6.0
    ActionChains(page.driver).move_to_element(page.driver.find_element("css selector", "h2")).perform()
    assert page.state()["iteration"] == before


def test_keys_move_slider_and_probe(page: Browser) -> None:
    from selenium.webdriver.common.keys import Keys

    slider = page.part("slider")
    slider.send_keys(Keys.HOME)
    page.settle()
    assert page.state()["iteration"] == 0
    slider.send_keys(Keys.END)
    page.settle()
    assert page.state()["iteration"] == 30
    slider.send_keys(Keys.ARROW_LEFT)
    page.settle()
    assert page.state()["iteration"] == 25
    picture = page.part("map")
    row, column = page.state()["probe"]
    picture.send_keys(Keys.ARROW_RIGHT)
    picture.send_keys(Keys.ARROW_DOWN)
    assert page.state()["probe"] == [row + 1, column + 1]
    picture.send_keys(Keys.SHIFT, Keys.ARROW_UP)
    assert page.state()["probe"] == [row - 9, column + 1]
    time.sleep(0.6)
    assert "velocity" not in page.part("status").text
    assert "m\N{NO-BREAK SPACE}s⁻¹" in page.run("return arguments[0].textContent", page.part("status"))


def test_veil_difference_and_spread_change_the_picture(page: Browser) -> None:
    as_it_is = page.canvas()
    page.set("threshold", 60)
    veiled = page.canvas()
    more = np.abs(veiled - as_it_is).max(axis=2) > 20
    assert 0.1 < more.mean() < 0.95
    page.set("threshold", 0)
    page.set("veiled", False, "change")
    bare = page.canvas()
    low = bare.shape[0] - 5
    assert np.abs(bare[low, ::7] - as_it_is[low, ::7]).max() > 60, "the colour under the veil comes out"
    hatch = 255 * np.array(to_rgb("#7c858c"))
    assert (np.abs(bare[..., :3] - hatch).max(axis=2) < 1).mean() > 0.003, "the hatch stays"
    page.set("veiled", True, "change")
    page.set("mode", "1", "change")
    middle = 255 * np.array(colormaps["PuOr"](0.5)[:3])
    height, width = as_it_is.shape[:2]
    np.testing.assert_allclose(page.canvas()[height // 2, width // 2, :3], middle, atol=3)
    page.set("mode", "spread", "change")
    spread = page.canvas()
    assert np.abs(spread - as_it_is).max() > 50
    told = page.run("return arguments[0].textContent", page.part("readout"))
    assert "spread between 5 picks" in told


def test_everything_has_a_name(page: Browser) -> None:
    tree = page.devtools("Accessibility.getFullAXTree")["nodes"]
    must = {
        "button",
        "slider",
        "img",
        "image",
        "combobox",
        "checkbox",
        "application",
        "link",
        "article",
        "table",
    }
    heard = [n for n in tree if not n.get("ignored") and n["role"]["value"] in must]
    assert len(heard) > 40
    nameless = [n["role"]["value"] for n in heard if not n.get("name", {}).get("value", "").strip()]
    assert [role for role in nameless if role != "table"] == []
    levels = page.run("return [...document.querySelectorAll('h1,h2,h3,h4')].map(h => +h.tagName[1])")
    assert levels[0] == 1
    assert max(np.diff(levels)) <= 1, "no level of headings is skipped"


def test_text_stands_out_from_its_ground(page: Browser) -> None:
    # Contrast after WCAG 2.1: at least 4.5 for text.
    found = page.run("""
      const parse = c => c.match(/[\\d.]+/g).map(Number);
      const light = c => { const f = c.slice(0, 3).map(v => { v /= 255; return v <= 0.03928 ? v / 12.92 : ((v + 0.055) / 1.055) ** 2.4; }); return 0.2126 * f[0] + 0.7152 * f[1] + 0.0722 * f[2]; };
      const ground = e => { for (; e; e = e.parentElement) { const c = parse(getComputedStyle(e).backgroundColor); if (c.length < 4 || c[3] > 0.99) return c; } return [255, 255, 255]; };
      const bad = [];
      for (const e of document.querySelectorAll('body *:not(.letter)')) {
        if (![...e.childNodes].some(n => n.nodeType === 3 && n.textContent.trim())) continue;
        const style = getComputedStyle(e), box = e.getBoundingClientRect();
        if (!box.width || style.visibility === 'hidden' || ['SCRIPT', 'STYLE', 'OPTION', 'OPTGROUP'].includes(e.tagName)) continue;
        const a = light(parse(e.namespaceURI.endsWith('svg') ? style.fill : style.color)), b = light(ground(e));
        const contrast = (Math.max(a, b) + 0.05) / (Math.min(a, b) + 0.05);
        if (contrast < 4.5) bad.push([e.tagName, e.textContent.slice(0, 40), contrast]);
      }
      return bad""")  # noqa: E501
    assert found == []
    for badge in BADGES.values():
        colour = np.array(to_rgb(badge.colour))
        linear = np.where(colour <= 0.03928, colour / 12.92, ((colour + 0.055) / 1.055) ** 2.4)
        assert 1.05 / (linear @ [0.2126, 0.7152, 0.0722] + 0.05) >= 4.5, badge


@pytest.mark.parametrize("sight", ["none", "deuteranopia", "protanopia", "tritanopia", "achromatopsia"])
def test_colours_tell_values_apart_for_every_eye(page: Browser, sight: str) -> None:
    def bar() -> np.ndarray:
        """Sixteen samples of the colour bar as it is seen, low to high, in CIE Lab."""
        page.run("document.querySelector('.map').scrollIntoView({block: 'center'})")
        left, top, high = page.run(
            "const m = window.report.map, b = m.host.getBoundingClientRect();"
            "return [b.left + 54 + m.wide + 20, b.top + 18, m.high]"
        )
        rows = top + high * (1 - (np.arange(16) + 0.5) / 16)
        return np.asarray(rgb2lab(page.screenshot()[rows.astype(int), int(left)] / 255))

    try:
        page.devtools("Emulation.setEmulatedVisionDeficiency", type=sight)
        page.set("mode", "value", "change")
        value = bar()
        assert np.diff(value[:, 0]).min() > 1, "lightness rises all along"
        page.set("mode", "0", "change")
        change = bar()
        assert change[8, 0] > max(change[0, 0], change[15, 0]), "no change is the lightest"
        for end in (0, 15):
            assert deltaE_ciede2000(change[end], change[8]) > 25
        assert deltaE_ciede2000(change[2], change[13]) > (5 if sight == "achromatopsia" else 20)
    finally:
        page.devtools("Emulation.setEmulatedVisionDeficiency", type="none")
        page.set("mode", "value", "change")


@pytest.mark.parametrize("width", [1366, 1024])
def test_nothing_scrolls_sideways(page: Browser, width: int, tmp_path: Path) -> None:
    page.devtools("Emulation.setDeviceMetricsOverride", **(WIDE | {"width": width, "height": 700}))
    page.settle()
    # Kept for people to look at: pytest keeps the folders of its last runs.
    Image.fromarray(page.screenshot().astype(np.uint8)).save(tmp_path / f"report-{width}.png")
    assert page.run("return document.documentElement.scrollWidth") <= width
    right, edge = page.run(
        "const m = document.querySelector('.map').getBoundingClientRect(),"
        "s = document.querySelector('.ground').getBoundingClientRect(); return [m.right, s.right]"
    )
    assert right <= edge


def test_the_picture_is_whole_on_a_small_screen(page: Browser) -> None:
    bottom = page.run("return document.querySelector('.map').getBoundingClientRect().bottom")
    assert bottom <= 768


def test_it_prints_whole_on_few_pages(page: Browser) -> None:
    printed = page.pdf()
    text = "\n".join(sheet.extract_text() for sheet in printed.pages)
    assert 2 <= len(printed.pages) <= 5
    for heading in HEADINGS:
        assert heading in text, heading
    assert "Play" not in text
    box = printed.pages[0].mediabox
    assert (round(box.width), round(box.height)) == (842, 595), "A4 landscape, in points"
    assert len(printed.pages[0].images) >= 1


def test_without_scripts_the_page_is_whole(browser: Browser, path: Path) -> None:
    browser.devtools("Emulation.setScriptExecutionDisabled", value=True)
    try:
        browser.driver.get(path.resolve().as_uri())
        text = "\n".join(sheet.extract_text() for sheet in browser.pdf().pages)
        root = browser.devtools("DOM.getDocument")["root"]["nodeId"]
        found = browser.devtools("DOM.querySelector", nodeId=root, selector="figure.static svg")
        # Refused of what is not displayed.
        box = browser.devtools("DOM.getBoxModel", nodeId=found["nodeId"])["model"]
    finally:
        browser.devtools("Emulation.setScriptExecutionDisabled", value=False)
    assert all(heading in text for heading in HEADINGS)
    assert min(box["width"], box["height"]) > 200


def test_a_damaged_blob_leaves_the_static_page(browser: Browser, path: Path, tmp_path: Path) -> None:
    text = path.read_text(encoding="utf-8")
    damaged = re.sub(r'(data-stack="picks">.{2000}).{40}', r"\1" + "A" * 40, text, count=1)
    assert damaged != text
    (tmp_path / "damaged.html").write_text(damaged, encoding="utf-8")
    browser.open(tmp_path / "damaged.html", ready="failed")
    shown = "return getComputedStyle(document.querySelector(arguments[0])).display"
    assert browser.run(shown, "figure.static") != "none"
    assert browser.run(shown, ".viewer") == "none"


def test_one_of_several_profiles_is_chosen_and_names_do_nothing(browser: Browser, tmp_path: Path) -> None:
    plain = make_result(argued=False, spacing=0.5)
    other = make_result(argued=False, spacing=0.5, word="drifting")
    odd = "<img src=x onerror=hurt=1>&quot;"
    folder = write_folder(tmp_path, {"ab": plain, "cd": other}, title="</script><script>hurt=1</script>")
    summary = json.loads((folder / "summary.json").read_text(encoding="utf-8"))
    summary["profiles"][1]["name"] = odd
    (folder / "summary.json").write_text(json.dumps(summary), encoding="utf-8")
    browser.open(write_report(folder))
    assert browser.run("return typeof hurt") == "undefined"
    assert (
        browser.run("return document.querySelector('h1').textContent") == "</script><script>hurt=1</script>"
    )
    visible = "return [...document.querySelectorAll('article')].filter(a => a.offsetHeight).map(a => a.id)"
    assert browser.run(visible) == ["profile-0"]
    select = (
        "const s = document.getElementById('choose'); s.value = arguments[0];"
        "s.dispatchEvent(new Event('change'))"
    )
    browser.run(select, "profile-1")
    for _ in range(200):
        if browser.run("return window.report.about.name") == odd:
            break
        time.sleep(0.02)
    assert browser.run(visible) == ["profile-1"]
    assert "drifting" in browser.run(
        "return document.getElementById('choose').selectedOptions[0].textContent"
    )
    assert browser.canvas()[..., 3].mean() > 200, "the picture of the second is drawn"


def test_a_column_follows_slider_and_probe(browser: Browser, result: Result, tmp_path: Path) -> None:
    browser.open(
        write_report(
            write_folder(tmp_path, {"sounding": column_of(result, 40)}, surface=GROUND, differences=USUAL)
        )
    )
    x, z = -2 + 0.25 * 40, np.linspace(64, 34, 121)
    browser.point_at((60, 0))
    state = browser.state()
    assert state["probe"] == [60, 0]
    assert state["value"] == pytest.approx(expected(9.0, (np.array(x), z[60])), abs=0.02)
    assert browser.run("return document.querySelectorAll('.map .usual').length") == 2
    browser.point_at((2, 0))
    assert "above the surface" in browser.run("return arguments[0].textContent", browser.part("readout"))
    curve = "return document.querySelector('.map .curve').getAttribute('d')"
    before = browser.run(curve)
    assert browser.run("return document.querySelectorAll('.map .band').length") == 1
    browser.set("slider", 0)
    assert browser.run(curve) != before
    assert browser.console() == []


def test_a_comparison_shows_both_and_their_difference(browser: Browser, tmp_path: Path) -> None:
    one = write_folder(tmp_path / "one", {"ab": make_result(argued=False, spacing=0.5)})
    other = write_folder(tmp_path / "other", {"ab": make_result(argued=False)}, shift=1.0)
    browser.open(write_comparison(one, other, tmp_path / "out"))
    frame = browser.run("return window.report.about.frame")
    x = np.linspace(*frame["distance"], frame["nx"])
    z = np.linspace(*frame["elevation"], frame["nz"])
    browser.point_at((44, 40))
    values = browser.state()["values"]
    assert browser.state()["probe"] == [44, 40]
    assert values[1] == pytest.approx(float(1 / slowness(x[40] - 1, z[44])), abs=0.05)
    assert values[2] == pytest.approx(values[1] - values[0], abs=0.05)
    assert browser.run("return document.querySelectorAll('.map canvas').length") == 3
    assert "difference" in browser.run("return arguments[0].textContent", browser.part("readout"))
    assert browser.console() == []
    text = "\n".join(sheet.extract_text() for sheet in browser.pdf().pages)
    assert "B less A" in text


def test_rays_are_drawn_over_the_field_until_they_are_switched_off(browser: Browser, tmp_path: Path) -> None:
    # Few, so that what is beside them is seen too.
    rays = tuple(ray if i % 156 == 0 else ray[:0] for i, ray in enumerate(bent_rays()))
    result = replace(bent(make_result(argued=False, spacing=0.5)), rays=rays)
    browser.open(write_report(write_folder(tmp_path, {"toe": result}, surface=SURFACE)))
    assert browser.console() == []

    def layer() -> np.ndarray:
        """Opacity of the layer of rays within the frame, to 255."""
        text, width, height, faint = browser.run(
            "const c = document.querySelectorAll('.map canvas')[1],"
            "[w, h, left, top] = window.report.state().box,"
            "d = c.getContext('2d').getImageData(left, top, Math.round(w), Math.round(h));"
            "let s = ''; for (let i = 3; i < d.data.length; i += 4) s += String.fromCharCode(d.data[i]);"
            "return [btoa(s), d.width, d.height, getComputedStyle(c).opacity]"
        )
        opaque = np.frombuffer(base64.b64decode(text), np.uint8).reshape(height, width)
        return opaque * float(faint)

    shown = layer()
    height, width = shown.shape
    x, z = nodes(browser)

    def near(distance: float, elevation: float) -> float:
        column = round((distance - x[0]) / (x[-1] - x[0]) * width)
        row = round((z[0] - elevation) / (z[0] - z[-1]) * height)
        return float(shown[row - 1 : row + 2, column - 1 : column + 2].max())

    assert 80 < shown.max() < 160, "faint"
    for ray in rays[::156]:
        for distance, elevation in ray[5:-5:10]:
            assert near(distance, elevation) > 20
            assert near(distance, elevation + 0.5) == 0
            assert near(distance, elevation - 0.5) == 0
    field = browser.canvas()
    browser.set("rays", False, "change")
    assert layer().max() == 0
    np.testing.assert_array_equal(browser.canvas(), field, err_msg="the field is another layer")
    browser.set("rays", True, "change")
    browser.set("slider", 0)
    np.testing.assert_array_equal(layer(), shown, err_msg="the rays of the answer stay at every iteration")
    browser.devtools("Emulation.setDeviceMetricsOverride", **(WIDE | {"width": 1024}))
    browser.settle()
    browser.settle()
    assert browser.run("const [a, b] = document.querySelectorAll('.map canvas'); return a.width === b.width")
    assert layer().max() > 60, "drawn again where the window changes"
