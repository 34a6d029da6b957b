#!/usr/bin/env python3
"""Test the report page in a real browser.

Usage: python3 scripts/page_in_browser.py FOLDTRACE [--shots DIR]

FOLDTRACE is the program to make the pages with. With --shots, pictures of the pages
by day and in the dark, on a desk and on a phone, and a print, are left in DIR to be
looked at.

Needs Chromium with its driver (in Debian: chromium, chromium-driver) and from PyPI
selenium and numpy. Nothing is fetched: the pages are opened from files, and a page
that asks for anything else fails. Ends with 1 if a check failed, 2 if it could not
be made.
"""

import argparse
import base64
import json
import shutil
import subprocess
import sys
import tempfile
import time
import wave
from pathlib import Path

try:
    import numpy as np
    from selenium import webdriver
    from selenium.common.exceptions import WebDriverException
    from selenium.webdriver.common.action_chains import ActionChains
    from selenium.webdriver.common.by import By
    from selenium.webdriver.common.keys import Keys
except ImportError as missing:
    sys.exit(f"page_in_browser: {missing} (pip install selenium numpy)")

ROOT = Path(__file__).resolve().parent.parent
SAMPLE = ROOT / "sample-data"
FLAGS = (
    "--headless --no-sandbox --disable-gpu --disable-quic --no-first-run "
    "--disable-background-networking --disable-component-update --disable-sync"
).split()

DESK = (1280, 900, False)
PHONE = (360, 740, True)

# What the page of an hour with 40 tones may cost.
MOST_BYTES = 1_500_000
MOST_MS = 1000.0

results = []


def check(name, passed, found=""):
    results.append(bool(passed))
    print(f"{'ok    ' if passed else 'FAILED'} {name}{'' if passed else f': {found}'}")


# --- the pages ---------------------------------------------------------------


def make(program, folder):
    """Pages of the sample data, of hostile names and of an hour with 40 tones."""
    skid = SAMPLE / "recordings" / "skid-8000.wav"
    site = SAMPLE / "orrowmere.toml"
    pages = {}

    def triage(name, *arguments):
        page = folder / f"{name}.html"
        done = subprocess.run(
            [program, "triage", *map(str, arguments), "--report", str(page)],
            capture_output=True,
            text=True,
        )
        if done.returncode:
            sys.exit(f"page_in_browser: {name}: {done.stderr.strip()}")
        pages[name] = page

    triage("skid", skid, "--site", site)
    triage("two", skid, SAMPLE / "recordings" / "fan-logger.csv", "--site", site)
    log, names = hostile(folder)
    triage("hostile", log, "--site", names)
    triage("hour", an_hour(folder / "hour.wav"), "--site", site)
    (folder / "hour.wav").unlink()
    return pages


def hostile(folder):
    """A log and a list whose names would do something if they were not escaped."""
    evil = ['</script><script>alert(1)</script>', '"><img src=x onerror=alert(1)>', "{{ 7*7 }}"]
    log = folder / "<svg onload=alert(1)>.csv"
    time_s = np.arange(5000) / 500.0
    noise = np.random.default_rng(3).normal(0, 0.05, (2, 5000))
    hum = np.sin(2 * np.pi * 50 * time_s) + noise
    with log.open("w", newline="") as out:
        quoted = ",".join('"' + name.replace('"', '""') + '"' for name in evil[:2])
        out.write(f"time,{quoted}\n")
        for row in zip(time_s, *hum):
            out.write(",".join(f"{v:.5f}" for v in row) + "\n")
    listed = folder / "hostile.toml"
    listed.write_text(
        "\n".join(
            f'[[source]]\nname = {json.dumps(name)}\nkind = "mains"\nhz = {50 + 9 * i}\n'
            for i, name in enumerate(evil)
        )
    )
    return log, listed


def an_hour(path, rate=8000, seconds=3600):
    """Forty tones in noise, ten of which wander together as one mains."""
    rng = np.random.default_rng(11)
    steady = np.sort(rng.uniform(700, 3900, 30))
    inside = np.arange(rate) / rate
    turn = np.exp(2j * np.pi * np.outer(steady, inside)).astype(np.complex64)
    orders = np.arange(1, 11)
    # A regular drift would be lines of its own: it wanders, within minutes.
    drift = np.zeros(seconds)
    for second in range(1, seconds):
        drift[second] = 0.99 * drift[second - 1] + rng.normal(0, 2e-6)
    drift = 50.0 * (1 + drift)
    phase = 0.0
    with wave.open(str(path), "wb") as out:
        out.setnchannels(1)
        out.setsampwidth(2)
        out.setframerate(rate)
        for second in range(seconds):
            start = np.exp(2j * np.pi * steady * second).astype(np.complex64)
            x = 0.01 * (start @ turn).imag
            cycles = phase + drift[second] * inside
            x += 0.02 * np.sin(2 * np.pi * np.outer(orders, cycles)).sum(axis=0)
            phase += drift[second]
            x += rng.normal(0, 0.05, rate)
            out.writeframes((32767 * np.clip(x, -1, 1)).astype("<i2").tobytes())
    return path


# --- the browser -------------------------------------------------------------


class Browser:
    def __init__(self, chromium, chromedriver, profile):
        options = webdriver.ChromeOptions()
        options.binary_location = chromium
        for flag in [*FLAGS, f"--user-data-dir={profile}"]:
            options.add_argument(flag)
        options.set_capability("goog:loggingPrefs", {"performance": "ALL", "browser": "ALL"})
        service = webdriver.ChromeService(executable_path=chromedriver)
        self.driver = webdriver.Chrome(options=options, service=service)
        self.cdp = self.driver.execute_cdp_cmd
        self.js = self.driver.execute_script

    def view(self, size=DESK, scheme="light", media=""):
        width, height, mobile = size
        metrics = dict(width=width, height=height, deviceScaleFactor=1, mobile=mobile)
        self.cdp("Emulation.setDeviceMetricsOverride", metrics)
        features = [
            {"name": "prefers-color-scheme", "value": scheme},
            # no smooth scrolling between a press and what it finds
            {"name": "prefers-reduced-motion", "value": "reduce"},
        ]
        self.cdp("Emulation.setEmulatedMedia", {"media": media, "features": features})

    def open(self, page):
        """Opens a page and returns what it asked for besides itself, and complained of."""
        self.driver.get("about:blank")
        self.driver.get_log("performance"), self.driver.get_log("browser")
        self.driver.get(page.as_uri())
        time.sleep(0.3)
        asked = []
        for entry in self.driver.get_log("performance"):
            message = json.loads(entry["message"])["message"]
            if message["method"] == "Network.requestWillBeSent":
                url = message["params"]["request"]["url"]
                if url.split("#")[0] != page.as_uri() and not url.startswith("data:"):
                    asked.append(url)
        return asked, [entry["message"] for entry in self.driver.get_log("browser")]

    def press(self, *keys):
        for key in keys:
            ActionChains(self.driver).send_keys(key).perform()

    def active(self):
        """Tag, tone or text of what has the focus."""
        return self.js(
            "const e = document.activeElement; return [e.tagName.toLowerCase(),"
            " e.dataset.tone || '', e.textContent.trim().slice(0, 40), e.className.baseVal ?? e.className]"
        )

    def shot(self, path):
        height = self.js("return document.documentElement.scrollHeight")
        width = self.js("return innerWidth")
        clip = dict(x=0, y=0, width=width, height=height, scale=1)
        shot = self.cdp("Page.captureScreenshot", {"captureBeyondViewport": True, "clip": clip})
        path.write_bytes(base64.b64decode(shot["data"]))


# --- the checks --------------------------------------------------------------


def quiet_and_narrow(browser, name, page):
    for size, scheme in [(DESK, "light"), (PHONE, "dark")]:
        browser.view(size, scheme)
        asked, complaints = browser.open(page)
        at = f"{name}, {size[0]} px, {scheme}"
        check(f"{at}: asks for nothing", not asked, asked)
        check(f"{at}: no console message", not complaints, complaints)
        wide = browser.js("return [document.documentElement.scrollWidth, innerWidth]")
        check(f"{at}: no horizontal scroll", wide[0] <= wide[1], wide)
    paper = {"light": "rgb(251, 250, 246)", "dark": "rgb(21, 25, 31)"}
    for scheme, colour in paper.items():
        browser.view(DESK, scheme)
        found = browser.js("return getComputedStyle(document.documentElement).backgroundColor")
        check(f"{name}: {scheme} paper", found == colour, found)


def keyboard(browser, page):
    browser.view()
    browser.open(page)
    browser.press(Keys.TAB)
    check("keyboard: first to the verdicts", browser.active()[3] == "skip", browser.active())
    browser.press(Keys.ENTER)
    check("keyboard: which it reaches", browser.active()[0] == "main", browser.active())
    stops = 0
    while browser.active()[0] != "a" or "mark" not in browser.active()[3]:
        browser.press(Keys.TAB)
        stops += 1
        if stops > 80:
            break
    check("keyboard: reaches the spectrum's first mark", browser.active()[1] == "tone-1", browser.active())
    browser.press(Keys.ARROW_RIGHT, Keys.ARROW_RIGHT)
    check("keyboard: arrows go from mark to mark", browser.active()[1] == "tone-3", browser.active())
    said = browser.js("return document.querySelector('.readout').textContent")
    check("keyboard: the focused mark's numbers show", said.startswith("tone 3: direct, seen at 24.26"), said)
    browser.press(Keys.TAB)
    check("keyboard: a picture is one stop", "mark" in browser.active()[3], browser.active())
    browser.press(Keys.TAB)
    check("keyboard: two pictures are two", "mark" not in browser.active()[3], browser.active())
    browser.js("document.querySelectorAll('a.mark[data-tone=tone-33]')[0].focus()")
    browser.press(Keys.ENTER)
    time.sleep(0.2)
    there = [browser.js("return location.hash"), browser.active()[:2]]
    check("keyboard: Enter goes to the tone's row", there == ["#tone-33", ["tr", "tone-33"]], there)


def column(browser, n, table="table.tones"):
    return browser.js(
        "return [...document.querySelectorAll(arguments[0] + ' tbody tr')]"
        ".filter(r => !r.hidden).map(r => r.cells[arguments[1]].dataset.v)",
        table,
        n,
    )


def tables(browser, page):
    browser.view()
    browser.open(page)
    buttons = browser.driver.find_elements(By.CSS_SELECTOR, "table.tones thead button")
    level = buttons[2]
    level.send_keys(Keys.ENTER)
    up = [float(v) for v in column(browser, 2)]
    check("tables: sorted by level, rising", up == sorted(up) and len(up) == 39, up)
    level.click()
    down = [float(v) for v in column(browser, 2)]
    check("tables: and falling", down == sorted(up, reverse=True), down)
    states = browser.js("return [...document.querySelectorAll('table.tones th[aria-sort]')].map(h => h.ariaSort)")
    check("tables: the heading says so", states == ["descending"], states)
    buttons[-1].click()
    words = column(browser, 6)
    sources = [w.rpartition(" ")[0] or w for w in words]
    orders = [int(w.split()[-1][:-1]) for w in words if w.startswith("supply mains")]
    check("tables: sorted by words", sources == sorted(sources) and sources[0] != sources[-1], words)
    check("tables: and the numbers in them", orders == sorted(orders) and orders[-1] == 13, orders)
    check("tables: sorting is no coincidence", [float(v) for v in column(browser, 2)] != down)

    find = browser.driver.find_element(By.CSS_SELECTOR, "[data-find]")
    find.send_keys("drive 1c")
    found = column(browser, 6)
    status = browser.js("return document.querySelector('.shown').textContent")
    check("tables: finding shows what is looked for", len(found) == 3 and all("drive 1c" in w for w in found), found)
    check("tables: and says how many", status == "3 of 39 tones shown", status)
    browser.driver.find_element(By.CSS_SELECTOR, "[data-verdict=folded]").click()
    check("tables: a verdict can be hidden", column(browser, 6) == [], column(browser, 6))
    browser.js("location.hash = '#tone-1'")
    time.sleep(0.2)
    visible = browser.js("return document.getElementById('tone-1').getBoundingClientRect().height > 0")
    check("tables: a link to a hidden tone shows it", visible and browser.active()[1] == "tone-1")
    browser.driver.find_element(By.CSS_SELECTOR, "table.sources thead button").click()
    names = column(browser, 0, "table.sources")
    check("tables: sources sort too", names == sorted(names) and len(names) == 6, names)


def pointing(browser, page):
    browser.view()
    browser.open(page)
    mark = browser.driver.find_element(By.CSS_SELECTOR, "a.mark[data-tone=tone-26] .glyph")
    browser.js("arguments[0].scrollIntoView({block: 'center'})", mark)
    time.sleep(0.6)
    ActionChains(browser.driver).move_to_element(mark).perform()
    said = browser.js("return document.querySelector('.readout').textContent")
    check("pointing: numbers of the mark", said.startswith("tone 26: open, seen at 1733.13"), said)
    lit = browser.js("return document.getElementById('tone-26').classList.contains('hot')")
    check("pointing: its row lights up", lit)
    sheet = browser.driver.find_element(By.CSS_SELECTOR, ".panel .sheet")
    ActionChains(browser.driver).move_to_element_with_offset(sheet, 93, 100).perform()
    said = browser.js("return document.querySelector('.readout').textContent")
    check("pointing: level of the spectrum", " Hz: loudest −" in said, said)


def names(browser, page):
    """What assistive technology is told: everything that takes the focus has a name."""
    browser.view()
    browser.open(page)
    browser.cdp("Accessibility.enable", {})
    nodes = browser.cdp("Accessibility.getFullAXTree", {})["nodes"]
    roles = {}
    nameless = []
    for node in nodes:
        role = node.get("role", {}).get("value")
        roles[role] = roles.get(role, 0) + 1
        if role in ("link", "button", "textbox", "searchbox", "checkbox", "region", "table"):
            if not node.get("ignored") and not node.get("name", {}).get("value", "").strip():
                nameless.append(role)
    check("names: all that can be used has one", not nameless, nameless)
    wanted = {"main": 1, "heading": 9, "table": 3, "columnheader": 13, "rowheader": 45}
    short = {role: roles.get(role, 0) for role, n in wanted.items() if roles.get(role, 0) < n}
    check("names: headings, tables and landmarks are there", not short, short)
    order = browser.js("return [...document.querySelectorAll('h1,h2,h3')].map(h => +h.tagName[1])")
    check("names: headings descend by one", order[0] == 1 and all(b - a <= 1 for a, b in zip(order, order[1:])), order)


def escaped(browser, page):
    browser.view()
    browser.open(page)
    try:
        found = browser.js(
            "return [document.images.length, document.scripts.length,"
            " document.querySelectorAll('[onload],[onerror]').length, document.title]"
        )
    except WebDriverException as alert:
        found = [str(alert)]
    check("hostile names are words", found[:3] == [0, 1, 0] and "onload=alert(1)" in found[3], found)
    shown = browser.js("return document.body.textContent")
    check("hostile names are shown", "<script>alert(1)</script>" in shown and "onerror=alert(1)" in shown)


def on_paper(browser, page):
    browser.view((700, 990, False), "dark", "print")
    browser.open(page)
    wide = browser.js("return [document.documentElement.scrollWidth, innerWidth]")
    check("print: fits the paper", wide[0] <= wide[1], wide)
    ink = browser.js("return getComputedStyle(document.body).color")
    check("print: is dark on light in the dark too", ink == "rgb(29, 39, 51)", ink)
    gone = browser.js("return getComputedStyle(document.querySelector('.tools')).display")
    check("print: leaves out what cannot be pressed", gone == "none", gone)
    browser.view()
    browser.cdp("Emulation.clearDeviceMetricsOverride", {})
    pdf = base64.b64decode(browser.cdp("Page.printToPDF", {"preferCSSPageSize": True})["data"])
    sheets = pdf.count(b"/Type /Page\n") + pdf.count(b"/Type /Page ") + pdf.count(b"/Type /Page/")
    check("print: a few sheets", 2 <= sheets <= 10, sheets)
    return pdf


def without_script(browser, page):
    browser.view()
    browser.cdp("Emulation.setScriptExecutionDisabled", {"value": True})
    browser.driver.get(page.as_uri())
    browser.cdp("Emulation.setScriptExecutionDisabled", {"value": False})
    rows = browser.driver.find_elements(By.CSS_SELECTOR, "table.tones tbody tr")
    tools = browser.driver.find_element(By.CSS_SELECTOR, ".tools")
    check("without script: all rows, no dead controls", len(rows) == 39 and rows[38].is_displayed() and not tools.is_displayed())


def an_hour_is_quick(browser, page):
    size = page.stat().st_size
    check(f"an hour, 40 tones: {size / 1e6:.2f} MB", size < MOST_BYTES, size)
    browser.view()
    shown = []
    for _ in range(3):
        browser.open(page)
        shown.append(
            browser.js(
                "const paint = performance.getEntriesByName('first-contentful-paint')[0]?.startTime ?? 1e9;"
                "return Math.max(paint, performance.getEntriesByType('navigation')[0].loadEventEnd)"
            )
        )
    tones = browser.js("return document.querySelectorAll('table.tones tbody tr').length")
    check(f"an hour: has its tones ({tones})", 38 <= tones <= 42, tones)
    shown.sort()
    check(f"an hour: shown in {shown[1]:.0f} ms (median of 3)", shown[1] < MOST_MS, shown)


def attempt(look, browser, page):
    """What the browser refuses fails the check, and the other ones go on."""
    try:
        return look(browser, page)
    except WebDriverException as refused:
        check(look.__name__, False, str(refused).splitlines()[0])
        return b""


def shots(browser, pages, folder, pdf):
    folder.mkdir(parents=True, exist_ok=True)
    for name in ("skid", "hour", "two"):
        for place, size in (("desk", DESK), ("phone", PHONE)):
            for scheme in ("light", "dark"):
                browser.view(size, scheme)
                browser.open(pages[name])
                browser.shot(folder / f"{name}-{place}-{scheme}.png")
    (folder / "skid.pdf").write_bytes(pdf)


def main():
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("program")
    parser.add_argument("--shots", type=Path)
    arguments = parser.parse_args()
    chromium, chromedriver = (shutil.which(n) for n in ("chromium", "chromedriver"))
    if not (chromium and chromedriver):
        print("page_in_browser: needs chromium and chromedriver", file=sys.stderr)
        return 2
    program = str(Path(arguments.program).resolve())
    with tempfile.TemporaryDirectory() as folder:
        folder = Path(folder)
        pages = make(program, folder)
        browser = Browser(chromium, chromedriver, folder / "profile")
        try:
            for name, page in pages.items():
                quiet_and_narrow(browser, name, page)
            for look in (keyboard, tables, pointing, names, without_script):
                attempt(look, browser, pages["skid"])
            attempt(escaped, browser, pages["hostile"])
            attempt(an_hour_is_quick, browser, pages["hour"])
            pdf = attempt(on_paper, browser, pages["skid"])
            if arguments.shots:
                shots(browser, pages, arguments.shots, pdf)
        finally:
            browser.driver.quit()
    print(f"browser: {sum(results)} passed, {len(results) - sum(results)} failed")
    return 0 if all(results) else 1


if __name__ == "__main__":
    sys.exit(main())
