"""The page in a real browser: its numbers are those of the arrays."""

from __future__ import annotations

import re
import shutil
from pathlib import Path

import numpy as np
import pytest

from recon.demo import instrument
from recon.errors import InputError
from recon.planning.tables import VariableDensity
from recon.report import Content, write_page
from recon.report.content import believable, quantised, verdict
from recon.specimen import Species
from tests import results

webdriver = pytest.importorskip("selenium.webdriver")
FLAGS = [
    "--headless",
    "--no-sandbox",
    "--disable-gpu",
    "--disable-quic",
    "--no-first-run",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
]


def species(name: str, shift: float) -> Species:
    return Species(
        name=name,
        shift_ppm=shift,
        equivalent_nuclei=3,
        t2_star_ms=20.0,
        t1_s=1.0,
        diffusion_um2_per_ms=0.2,
        polarisation=0.01,
    )


@pytest.fixture(scope="module")
def content() -> Content:
    maps, cube = results.maps(), results.cube()
    protocol = VariableDensity(shots=4).protocol(maps.grid, cube.sample_times)
    lines = (species("lactate", results.SHIFT), species("lipid CH2", 1.28))
    truth = maps.values + np.float32(1.5)
    return Content(maps, cube, lines, instrument(), protocol, truth, title="A <test> & more")


@pytest.fixture(scope="module")
def page(content, tmp_path_factory) -> Path:
    return write_page(tmp_path_factory.mktemp("page") / "page.html", content)


@pytest.fixture(scope="module")
def chromium(tmp_path_factory):
    driver, program = shutil.which("chromedriver"), shutil.which("chromium")
    if driver is None or program is None:
        pytest.skip("no browser: install Debian's chromium and chromium-driver")
    options = webdriver.ChromeOptions()
    options.binary_location = program
    profile = tmp_path_factory.mktemp("profile")
    for flag in (*FLAGS, f"--user-data-dir={profile}", "--window-size=1400,1000"):
        options.add_argument(flag)
    running = webdriver.Chrome(
        options=options, service=webdriver.ChromeService(executable_path=driver)
    )
    yield running
    running.quit()


@pytest.fixture
def browser(chromium, page):
    """The page as it opens, on a screen 1400 pixels wide."""
    chromium.execute_cdp_cmd("Emulation.clearDeviceMetricsOverride", {})
    chromium.execute_cdp_cmd("Emulation.setEmulatedMedia", {"media": ""})
    chromium.get(page.as_uri())
    return chromium


def shown(browser, place: int) -> tuple[float, float]:
    cell = browser.find_element("id", f"amount-{place}")
    return float(cell.get_attribute("data-value")), float(cell.get_attribute("data-error"))


def point_at(browser, y: int, x: int) -> None:
    _, ny, nx = results.grid().shape
    browser.execute_script(
        "const c = document.getElementById('plane'), b = c.getBoundingClientRect();"
        f"c.dispatchEvent(new PointerEvent('pointerdown', {{bubbles: true, buttons: 1,"
        f"clientX: b.left + b.width * {(x + 0.5) / nx},"
        f"clientY: b.top + b.height * {1 - (y + 0.5) / ny}}}));"
    )


def test_pointing_reads_the_arrays(browser, content):
    """Every voxel pointed at shows its own amounts, errors and spectrum."""
    maps = content.maps
    _, spectrum = content.cube.spectrum()
    browser.find_element("id", "plane-1").click()
    for y, x in ((0, 0), (3, 4), (2, 1)):
        point_at(browser, y, x)
        for place in range(2):
            value, error = shown(browser, place)
            assert value == pytest.approx(float(maps.values[place, 1, y, x]), rel=1e-6)
            assert error == pytest.approx(float(maps.standard_error[place, 1, y, x]), rel=1e-6)
        peak = float(browser.find_element("id", "spectrum").get_attribute("data-peak"))
        assert peak == pytest.approx(float(spectrum[:, 1, y, x].real.max()), rel=3e-5)
    text = browser.find_element("id", "amount-0").text
    assert re.fullmatch(r"[\d.\s\u202f]+ ± 3\.0", text)


def test_keyboard_moves_through_everything(browser, content):
    from selenium.webdriver.common.keys import Keys

    point_at(browser, 1, 1)
    plane = browser.find_element("id", "plane")
    plane.send_keys(Keys.ARROW_RIGHT, Keys.ARROW_UP, Keys.PAGE_UP)
    assert shown(browser, 0)[0] == pytest.approx(float(content.maps.values[0, 1, 2, 2]))
    plane.send_keys("2", "v")
    assert browser.find_element("id", "species-1").is_selected()
    assert browser.find_element("id", "view-error").is_selected()
    title = browser.find_element("id", "plane-title").text
    assert title == "lipid CH2, standard error, 7 µm above the diamond"
    assert "lipid CH2" in browser.find_element("id", "spoken").get_attribute("textContent")


def test_section_lies_under_the_plan_and_answers(browser, content):
    """The cut shares the plan's x axis, the lowest plane lies lowest, and pointing at it counts."""
    from selenium.webdriver.common.action_chains import ActionChains

    box = "const b = document.querySelector('{}').getBoundingClientRect(); return [{}];"
    left, right = browser.execute_script(box.format("#plane", "b.left, b.right"))
    cut = browser.execute_script(box.format("#stack image", "b.left, b.right"))
    assert cut == pytest.approx([left, right], abs=1.5)
    tops = [browser.execute_script(box.format(f"#plane-{z} rect", "b.top"))[0] for z in range(3)]
    assert tops == sorted(tops, reverse=True)
    point_at(browser, 2, 0)
    target = browser.find_element("id", "plane-2")
    wide = target.size["width"]
    across = left + (3.5 / 5) * (right - left) - (target.rect["x"] + wide / 2)
    ActionChains(browser).move_to_element_with_offset(target, int(across), 0).click().perform()
    assert shown(browser, 0)[0] == pytest.approx(float(content.maps.values[0, 2, 2, 3]))


def test_truth_widths_and_reasons_are_told(browser):
    point_at(browser, 1, 1)
    rows = browser.find_element("id", "believe").text
    assert "true error (mM)" in rows
    assert "width of a point, x × y (µm) 6.00 × 4.00" in rows
    assert "standard errors agree with it" in browser.find_element("id", "remarks").text
    assert "standard errors" in browser.find_element("id", "why").text
    assert re.search(r"± [\d.]+ .?A/m s", browser.find_element("id", "band").text)


def test_verdict_names_planes_whose_truth_lies_far_off():
    maps = results.maps()
    truth = maps.values.copy()
    truth[1, 2] += 100
    rows = believable(maps, truth)
    said = verdict(rows, maps.grid)
    assert rows[1]["off"] == [False, False, True]
    assert rows[1]["inside"] == [1.0, 1.0, 0.0]
    assert "lipid CH2 at 11 µm" in said[0]
    assert "lactate" not in said[0]
    assert verdict(believable(maps, None), maps.grid) == []


def test_quantised_curves_keep_their_shape():
    rng = np.random.default_rng(0)
    curves = (rng.normal(size=(50, 4)) * 10.0 ** np.arange(-9, -1, 2)).astype(np.float32)
    curves[:, 0] = 0
    numbers, quantum = quantised(curves)
    off = np.abs(numbers * quantum - curves).max(axis=0)
    assert (off <= 2e-5 * np.abs(curves).max(axis=0)).all()


def test_print_redraws_to_the_paper(browser):
    """In print, plan and section keep their common axis and the controls are gone."""
    browser.execute_cdp_cmd("Emulation.setEmulatedMedia", {"media": "print"})
    browser.execute_async_script("requestAnimationFrame(() => arguments[0]())")
    ends = "(s) => {const b = document.querySelector(s).getBoundingClientRect(); return b.left;}"
    lefts = browser.execute_script(f"const e = {ends}; return [e('#plane'), e('#stack image')];")
    assert lefts[0] == pytest.approx(lefts[1], abs=1.5)
    assert not browser.find_element("id", "species").is_displayed()


def test_page_says_what_must_be_said(browser):
    text = browser.find_element("tag name", "body").text
    assert "not for diagnosis" in text
    assert "A <test> & more" in text
    assert "piecewise constant (test)" in text
    assert "intervals can be too narrow" in text
    assert "mM" in text
    assert not browser.get_log("browser")


@pytest.mark.parametrize("width", [380, 900, 1400])
def test_nothing_overflows(browser, width):
    browser.execute_cdp_cmd(
        "Emulation.setDeviceMetricsOverride",
        {"width": width, "height": 900, "deviceScaleFactor": 1, "mobile": False},
    )
    wide = browser.execute_script("return document.documentElement.scrollWidth")
    assert wide <= width


def test_page_fetches_nothing(page):
    text = page.read_text(encoding="utf-8")
    assert not re.search(r"(src|href)\s*=\s*[\"'](?!data:)", text)
    assert not re.search(r"https?://(?!www\.w3\.org/2000/svg)", text)


def test_content_must_fit(content):
    with pytest.raises(InputError, match="same order"):
        Content(content.maps, content.cube, content.species[::-1], instrument(), content.protocol)
