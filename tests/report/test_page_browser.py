"""The page in headless Chromium: quiet, complete, usable by keyboard, and deaf to what titles say."""

from __future__ import annotations

import json
import shutil
import time

import pytest
from steel import build

from xrfid.report.page import render_page

pytestmark = pytest.mark.browser

CHROMIUM, DRIVER = shutil.which("chromium"), shutil.which("chromedriver")
FLAGS = (
    "--headless=new --no-sandbox --disable-gpu --disable-quic --no-first-run --disable-background-networking "
    "--disable-component-update --disable-sync"
)
HOSTILE = '</title><script>document.title="pwned"</script><img src=x onerror=alert(1)>'


@pytest.fixture(scope="module")
def driver(tmp_path_factory):
    if not (CHROMIUM and DRIVER):
        pytest.skip("needs Debian's chromium and chromium-driver")
    webdriver = pytest.importorskip("selenium.webdriver")
    from selenium.webdriver.chrome.service import Service

    options = webdriver.ChromeOptions()
    options.binary_location = CHROMIUM
    for flag in [*FLAGS.split(), f"--user-data-dir={tmp_path_factory.mktemp('profile')}"]:
        options.add_argument(flag)
    options.set_capability("goog:loggingPrefs", {"browser": "ALL", "performance": "ALL"})
    browser = webdriver.Chrome(options, Service(DRIVER))
    yield browser
    browser.quit()


class Visit:
    """One page opened at one size."""

    def __init__(self, driver, path, width, height):
        self.driver = driver
        metrics = {"width": width, "height": height, "deviceScaleFactor": 1, "mobile": width < 500}
        driver.execute_cdp_cmd("Emulation.setDeviceMetricsOverride", metrics)
        driver.get_log("performance")
        driver.get_log("browser")
        driver.get(path.as_uri())
        self.wait("return document.body.dataset.ready === 'true'")

    def run(self, script):
        return self.driver.execute_script(script)

    def wait(self, script, seconds=20.0):
        deadline = time.monotonic() + seconds
        while not self.run(script):
            assert time.monotonic() < deadline, (
                f"never true: {script}; console: {self.driver.get_log('browser')}"
            )
            time.sleep(0.05)

    def press(self, selector):
        """Press a button by keyboard."""
        button = self.driver.find_element("css selector", selector)
        button.send_keys("\ue007")

    @property
    def requests(self):
        messages = [json.loads(entry["message"])["message"] for entry in self.driver.get_log("performance")]
        sent = [m["params"] for m in messages if m["method"] == "Network.requestWillBeSent"]
        return [p["request"]["url"] for p in sent if p.get("documentURL", "").startswith("file:")]

    @property
    def complaints(self):
        return [e["message"] for e in self.driver.get_log("browser") if e["level"] in ("SEVERE", "WARNING")]


@pytest.fixture(params=[(1280, 800), (390, 844)], ids=["desk", "phone"])
def visit(request, driver, tmp_path):
    path = tmp_path / "page.html"
    path.write_text(render_page(build()), "utf-8")
    return Visit(driver, path, *request.param)


MODEL = "const m = (name) => Bokeh.documents[0].get_model_by_name(name);"


def test_loads_quietly(visit):
    assert visit.complaints == []
    assert [url for url in visit.requests if not url.startswith(("file:", "data:"))] == []


def test_shows_every_identified_element(visit):
    shown = visit.driver.find_elements("css selector", ".symbols a")
    assert [x.text for x in shown] == ["Fe", "Cr", "Ni", "Mo", "Mn", "Si"]
    assert all(x.is_displayed() for x in shown)
    names = visit.run(MODEL + "return m('names').data.text")
    assert {"Fe Kα", "Cr Kα", "Mo Kα"} <= set(names)


def test_the_layout_holds(visit):
    assert visit.run("return document.documentElement.scrollWidth <= window.innerWidth")
    box = visit.run(
        "const r = document.getElementById('plot').getBoundingClientRect();return [r.left, r.right, r.height]"
    )
    assert box[0] >= 0
    assert box[1] <= visit.run("return window.innerWidth")
    assert box[2] > 400


def test_names_keep_their_distance(visit):
    gap = visit.run(
        MODEL + "const x = m('names').data.x, r = m('energy'), w = m('log').inner_width;"
        "return Math.min(...x.slice(1).map((v, i) => v - x[i])) / (r.end - r.start) * w"
    )
    assert gap >= 13.9


def test_scale_and_zoom_by_keyboard(visit):
    visit.press("[data-scale=linear]")
    assert visit.run(MODEL + "return [m('log').visible, m('linear').visible]") == [False, True]
    before = visit.run(MODEL + "return [m('energy').start, m('energy').end]")
    visit.press("[data-zoom='0.5']")
    after = visit.run(MODEL + "return [m('energy').start, m('energy').end]")
    assert after[1] - after[0] == pytest.approx((before[1] - before[0]) / 2)
    visit.press("[data-move='0.4']")
    assert visit.run(MODEL + "return m('energy').start") > after[0]
    visit.press("[data-whole]")
    assert visit.run(MODEL + "return [m('energy').start, m('energy').end]") == pytest.approx(before)
    visit.press("[data-parts]")
    assert visit.run(MODEL + "return m('parts of linear').visible") is False


def test_proof_on_demand(visit):
    panel = visit.driver.find_element("css selector", "#finding-Mo .panels svg")
    assert not panel.is_displayed()
    visit.press("#finding-Mo summary")
    assert panel.is_displayed()
    visit.press("#finding-Mo button.show")
    start, end = visit.run(MODEL + "return [m('energy').start, m('energy').end]")
    assert start < 2.3 < 19.6 < end
    visit.wait(MODEL + "return m('names').data.text.includes('Mo Kα')")


def test_limits_sort(visit):
    visit.run("document.querySelectorAll('details').forEach((d) => { d.open = true; })")
    head = ".sortable th:nth-child(4)"
    cells = (
        "const cells = [...document.querySelectorAll('.sortable tbody td:nth-child(4)')];"
        "return cells.map((c) => Number(c.dataset.value))"
    )
    visit.press(f"{head} button")
    rising = visit.run(cells)
    assert rising == sorted(rising)
    visit.press(f"{head} button")
    assert visit.run(cells) == rising[::-1]
    assert visit.driver.find_element("css selector", head).get_attribute("aria-sort") == "descending"


def test_hover_says_what_is_there(driver, tmp_path):
    path = tmp_path / "page.html"
    path.write_text(render_page(build()), "utf-8")
    visit = Visit(driver, path, 1280, 800)
    visit.run(
        MODEL
        + "m('energy').setv({start: 6.3, end: 6.5}); document.getElementById('spectrum').scrollIntoView()"
    )
    from selenium.webdriver.common.action_chains import ActionChains

    plot = driver.find_element("id", "plot")
    ActionChains(driver).move_to_element(plot).perform()
    found = (
        "const walk = (n) => [n, ...(n.shadowRoot ? walk(n.shadowRoot) : []),"
        " ...[...n.children].flatMap(walk)];"
        "return walk(document.body).some((n) => n.classList && n.classList.contains('bk-tooltip-content')"
        " && n.textContent.includes('Fe Kα1, 58 % of Fe K'))"
    )
    visit.wait(found)


def test_a_hostile_title_does_nothing(driver, tmp_path):
    path = tmp_path / "page.html"
    path.write_text(render_page(build(path=None, title=HOSTILE)), "utf-8")
    visit = Visit(driver, path, 1280, 800)
    assert visit.complaints == []
    assert "pwned" not in driver.title.replace(HOSTILE, "")
    assert driver.find_element("tag name", "h1").text == HOSTILE
    assert driver.find_elements("tag name", "img") == []
