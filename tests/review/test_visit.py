"""Whole visits in headless Chromium: open, select, ask what if, remark, decide, save, reload; maps; uploads."""

from __future__ import annotations

import json
import shutil
import time
from dataclasses import replace
from pathlib import Path

import pytest

pytest.importorskip("panel")

from served import Running

from xrfid.formats import read_spectrum
from xrfid.instrument import Instrument
from xrfid.report.document import to_json
from xrfid.review.journal import read_journal

pytestmark = pytest.mark.browser

SAMPLES = Path(__file__).parents[2] / "sample_spectra"
CHROMIUM, DRIVER = shutil.which("chromium"), shutil.which("chromedriver")
FLAGS = (
    "--headless=new --no-sandbox --disable-gpu --disable-quic --no-first-run --disable-background-networking "
    "--disable-component-update --disable-sync"
)
HOSTILE = '</h1><script>document.title="pwned"</script><img src=x onerror="document.title=\'pwned\'">'
WALK = """
function* walk(n) {
  yield n;
  if (n.shadowRoot) yield* walk(n.shadowRoot);
  for (const c of n.children || []) yield* walk(c);
}
const all = (s) => [...walk(document.documentElement)].filter((n) => n.matches && n.matches(s));
const control = (k) => { const h = all('.key-' + k)[0];
  return h && (h.shadowRoot || h).querySelector('button, select, textarea, input'); };
const text = (s) => all(s).map((n) => n.textContent).join(' ');
"""


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
    """One tab that looks at a running review."""

    def __init__(self, driver, running, width=1280, height=800):
        self.driver, self.running = driver, running
        metrics = {"width": width, "height": height, "deviceScaleFactor": 1, "mobile": width < 500}
        driver.execute_cdp_cmd("Emulation.setDeviceMetricsOverride", metrics)
        driver.get_log("browser")
        driver.get_log("performance")
        driver.get(running.server.url)

    def run(self, script, *arguments):
        return self.driver.execute_script(WALK + script, *arguments)

    def wait(self, script, seconds=20.0):
        deadline = time.monotonic() + seconds
        while not (found := self.run(script)):
            if time.monotonic() > deadline:
                shown = self.driver.execute_script(WALK + "return text('.status')")
                pytest.fail(f"never true: {script}; console: {self.complaints}; status: {shown}")
            time.sleep(0.05)
        return found

    def control(self, name):
        return self.wait(f"return control('{name}')")

    def keys(self, *pressed):
        """Press keys outside of any field."""
        self.run("document.activeElement.blur()")
        for key in pressed:
            self.driver.find_element("tag name", "body").send_keys(key)

    def press(self, name):
        """Press a button by keyboard."""
        self.control(name).send_keys("\ue007")

    def status(self, word):
        self.wait(f"return text('.status').includes({json.dumps(word)})")

    @property
    def complaints(self):
        return [e["message"] for e in self.driver.get_log("browser") if e["level"] in ("SEVERE", "WARNING")]

    @property
    def elsewhere(self):
        """Requests to anywhere but the review itself."""
        messages = [json.loads(e["message"])["message"] for e in self.driver.get_log("performance")]
        sent = [m["params"]["request"]["url"] for m in messages if m["method"] == "Network.requestWillBeSent"]
        own = (self.running.server.url, "data:", f"blob:http://{self.running.host}", "chrome")
        return [url for url in sent if not url.startswith(own)]


@pytest.fixture
def running(tmp_path):
    made = Running(tmp_path, Instrument.load(SAMPLES / "workshop.toml"), [read_spectrum(SAMPLES / "coupon.msa")])
    yield made
    made.close()


def test_a_whole_visit(driver, running):
    visit = Visit(driver, running)
    visit.status("6 elements identified")
    assert visit.run("return [...control('findings').options].map((o) => o.textContent.split(':')[0])") == [
        "Fe", "Cr", "Ni", "Mo", "Mn", "Si", "Rh",
    ]  # fmt: skip
    # select by keyboard; its proof appears
    visit.keys("j", "j", "j")
    visit.wait("return text('h2').startsWith('Mo: identified')")
    assert visit.run("return all('.panels > svg').length") == 3
    # what if it is not there
    start = time.monotonic()
    visit.keys("w")
    visit.wait("return text('#answer').includes('Without Mo')")
    assert time.monotonic() - start < 3.0  # the refit takes less than half a second; the rest is the browser's
    visit.wait("return Bokeh.documents[0].get_model_by_name('trial').data.energy.length === 2048")
    # question it with a remark
    visit.keys("r")
    visit.control("remark").send_keys("plated?")
    visit.press("question")
    visit.status("Mo questioned")
    visit.wait("return [...control('findings').options].some((o) => o.textContent.includes('? questioned'))")
    assert visit.run("return control('remark').value") == ""
    # save record and page
    visit.keys("s")
    visit.status("Saved coupon.review.json and coupon.html")
    record = json.loads((running.desk.folder / "coupon.review.json").read_text("utf-8"))
    decided = next(e for e in record["elements"] if e["element"] == "Mo")
    assert (decided["automatic"], decided["decision"]["choice"]) == ("identified", "questioned")
    assert (decided["decision"]["remark"], decided["decision"]["by"]) == ("plated?", "A. Reader")
    assert record["trials"][0]["element"] == "Mo"
    assert "plated?" in (running.desk.folder / "coupon.html").read_text("utf-8")
    # a remark that is only begun outlives the tab
    visit.keys("k")
    visit.wait("return text('h2').startsWith('Ni: identified')")
    visit.control("remark").send_keys("half a thou")
    visit.wait("return control('remark').value === 'half a thou'")
    time.sleep(0.5)
    assert visit.complaints == []
    assert visit.elsewhere == []
    driver.get("about:blank")
    again = Visit(driver, running)
    again.status("1 decided")
    again.keys("j", "j")
    again.wait("return control('remark').value === 'half a thou'")
    again.keys("j")
    again.wait("return text('.history').includes('plated?')")
    assert again.complaints == []


def test_the_next_review_remembers(driver, running, tmp_path):
    visit = Visit(driver, running)
    visit.status("6 elements identified")
    visit.keys("a")
    visit.status("Fe accepted")
    other = Running(tmp_path, None, [read_spectrum(SAMPLES / "coupon.msa")])
    try:
        again = Visit(driver, other)
        again.status("1 decided")
        assert again.wait("return control('findings').options[0].textContent.includes('✓ accepted')")
    finally:
        other.close()


def test_what_if_this_one_is(driver, running):
    visit = Visit(driver, running)
    visit.status("6 elements identified")
    visit.run(
        "const s = control('others'); s.selectedIndex = [...s.options].findIndex((o) => o.textContent === 'Cu');"
        "s.dispatchEvent(new Event('change', { bubbles: true }))"
    )
    visit.wait("return control('whatif').textContent.includes('What if Cu is there?')")
    visit.press("whatif")
    visit.wait("return text('#answer').includes('the counts do not need it')")
    assert visit.run("return all('.panels > svg').length") >= 1


def test_a_question_without_a_reason_is_refused_on_the_page(driver, running):
    visit = Visit(driver, running)
    visit.status("6 elements identified")
    visit.keys("q")
    visit.status("questioned without a reason")
    assert read_journal(running.desk.folder, next(iter(running.desk.cases.values())).spectrum) is None


def test_the_instrument_form_changes_the_answer(driver, running):
    visit = Visit(driver, running)
    visit.status("6 elements identified")
    visit.run("document.querySelector('.instrument').open = true")
    field = visit.wait("return all('input').find((n) => n.value === '40')")
    field.send_keys("\ue003" * 2 + "forty" + "\ue007")
    visit.press("facts")
    visit.status('"forty" is no number')
    field.send_keys("\ue003" * 5 + "38" + "\ue007")
    visit.press("facts")
    visit.status("elements identified")
    case = next(iter(running.desk.cases.values()))
    assert case.journal.instrument.tube.voltage_kv == 38.0
    assert case.work.instrument.tube.voltage_kv == 38.0


def test_an_upload_comes_into_work(driver, running):
    visit = Visit(driver, running)
    visit.status("6 elements identified")
    driver.find_element("id", "file").send_keys(str(SAMPLES / "brass_fitting.csv"))
    visit.status("opened brass_fitting.csv")
    visit.wait("return text('h1').includes('brass_fitting.csv')")
    visit.wait("return [...control('findings').options].some((o) => o.textContent.startsWith('Zn'))")
    assert visit.complaints == []


def test_a_hostile_title_does_nothing(driver, tmp_path):
    hostile = replace(read_spectrum(SAMPLES / "coupon.msa"), title=HOSTILE, path=None)
    running = Running(tmp_path, Instrument.load(SAMPLES / "workshop.toml"), [hostile])
    try:
        visit = Visit(driver, running)
        visit.status("6 elements identified")
        visit.control("remark").send_keys(HOSTILE)
        visit.press("question")
        visit.wait("return text('.history').includes('onerror')")
        assert driver.title == "xrfid review"
        assert visit.run("return all('img').length") == 0
        assert visit.complaints == []
    finally:
        running.close()


@pytest.mark.parametrize(("width", "height"), [(1280, 800), (390, 844)], ids=["desk", "phone"])
def test_the_layout_holds(driver, running, width, height):
    visit = Visit(driver, running, width, height)
    visit.status("6 elements identified")
    visit.wait("return all('.panels > svg').length > 0")
    assert visit.run("return document.documentElement.scrollWidth <= window.innerWidth")
    unnamed = visit.run(
        "return all('button, select, textarea, input').filter((n) => n.offsetParent !== null)"
        ".filter((n) => !(n.labels && n.labels.length) && !n.textContent.trim() && !n.getAttribute('aria-label'))"
        ".map((n) => n.outerHTML)"
    )
    assert unnamed == []


def test_a_region_of_a_batch_result(driver, tmp_path):
    from selenium.webdriver.common.action_chains import ActionChains

    from xrfid.batch import run
    from xrfid.review.scan import Scan

    result = tmp_path / "result.h5"
    run(SAMPLES / "panel_run.h5", result, document=to_json, instrument=Instrument.load(SAMPLES / "museum.toml"))
    scan = Scan(result)
    running = Running(tmp_path, None, [scan.whole()], scan)
    try:
        visit = Visit(driver, running, 1280, 1500)
        visit.status("elements identified")
        visit.run(
            "const s = control('map'); s.selectedIndex = [...s.options].findIndex((o) => o.textContent === 'Fe K');"
            "s.dispatchEvent(new Event('change', { bubbles: true }))"
        )
        frame = visit.wait(
            "const v = Bokeh.index.find_one_by_id(Bokeh.documents[0].get_model_by_name('scan').id);"
            "if (!v || !v.frame) return null;"
            "const r = v.el.getBoundingClientRect(), x = v.frame.x_scale, y = v.frame.y_scale;"
            "return [r.left + x.compute(4.5), r.top + y.compute(32.5),"
            " r.left + x.compute(6.5), r.top + y.compute(34.5)]"
        )
        actions = ActionChains(driver)
        actions.w3c_actions.pointer_action.move_to_location(frame[0], frame[1])
        actions.w3c_actions.pointer_action.pointer_down()
        actions.w3c_actions.pointer_action.move_to_location(frame[2], frame[3])
        actions.w3c_actions.pointer_action.pointer_up()
        actions.w3c_actions.perform()
        visit.wait("return text('h1').includes('rows 32-34, columns 4-6')")
        visit.wait("return [...control('findings').options].some((o) => o.textContent.startsWith('Fe: identified'))")
        visit.press("region")  # the same region, now by keyboard
        visit.wait("return text('h1').includes('rows 32-34, columns 4-6')")
        assert visit.complaints == []
    finally:
        running.close()
