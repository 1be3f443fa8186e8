"""The desk, driven in a real browser by keys and mouse as an observer would."""

from __future__ import annotations

import json
import os
import statistics
import subprocess
import sys
import time

import pytest
from desk_driver import SIZE, DeskProcess, Page
from selenium.webdriver.common.action_chains import ActionChains
from selenium.webdriver.common.keys import Keys

from starfathom.decisions import DecisionLog

FIRST_PAINT_MS = 2000.0
MOVE_MS = 150.0


def within_time(measured_ms: float, limit_ms: float) -> None:
    """Fail when too slow; but nothing can be timed on a machine that others keep busy, which is said, not hidden."""
    if measured_ms <= limit_ms:
        return
    load, cores = os.getloadavg()[0], len(os.sched_getaffinity(0))
    words = f"{measured_ms:.0f} ms, wanted {limit_ms:.0f} ms, at a load of {load:.1f} on {cores} cores"
    if load > 2 * cores and not os.environ.get("CI"):
        pytest.skip(f"too busy to time anything: {words}")
    pytest.fail(words)


def log_of(night) -> DecisionLog:
    return DecisionLog(night / "decisions.jsonl")


def test_first_paint(chromium, desk):
    """From asking for the address to the first picture of the star, the best of three on a machine that may be busy."""
    times = []
    for _ in range(3):
        page = Page(chromium, desk.address)
        page.until("return performance.getEntriesByName('first-contentful-paint').length")
        times.append(page.run("return performance.getEntriesByName('first-contentful-paint')[0].startTime"))
    within_time(min(times), FIRST_PAINT_MS)


def test_everything_fits_the_screen(page):
    assert page.run("return [innerWidth, innerHeight]") == list(SIZE)
    assert page.run("return document.documentElement.scrollHeight <= innerHeight")
    assert page.run("return document.documentElement.scrollWidth <= innerWidth")
    for section in ("spectrum", "plane", "evidence", "strip"):
        box = page.run("const b = document.getElementById(arguments[0]).getBoundingClientRect();"
                       "return [b.width, b.height, b.bottom]", section)
        assert box[0] > 250 and box[1] > 120 and box[2] <= SIZE[1]


def test_keys_move_and_the_template_follows(page):
    pictures = {name: page.picture(name) for name in ("spectrum", "plane", "strip")}
    first = page.text("place")
    moved = page.press(Keys.ARROW_RIGHT)
    assert moved != first
    page.press(Keys.ARROW_RIGHT)
    page.press(Keys.ARROW_UP)
    for name, before in pictures.items():
        end = time.monotonic() + 5
        while page.picture(name) == before and time.monotonic() < end:
            time.sleep(0.05)
        assert page.picture(name) != before, name
    back = page.press("m")
    assert back.split("·")[0] == first.split("·")[0]


def test_a_move_redraws_in_time(page):
    """From the key to the frame after the pictures were drawn."""
    script = """
        const [key, done] = arguments
        const start = performance.now()
        const seen = new MutationObserver(() => {
          seen.disconnect()
          requestAnimationFrame(() => requestAnimationFrame(() => done(performance.now() - start)))
        })
        seen.observe(document.getElementById("place"), {childList: true, subtree: true, characterData: true})
        document.body.dispatchEvent(new KeyboardEvent("keydown", {key, bubbles: true, composed: true}))"""
    keys = ["ArrowRight"] * 8 + ["ArrowLeft"] * 16 + ["ArrowRight"] * 8
    times = [page.browser.execute_async_script(script, key) for key in keys][2:]
    within_time(statistics.median(times), MOVE_MS)


def test_the_mouse_moves_too(page):
    first = page.text("place")
    plane = page.run("return document.querySelector('#plane .plot')")
    for _ in range(3):
        ActionChains(page.browser).move_to_element_with_offset(plane, 90, 20).click().perform()
        if page.text("place") != first:
            break
        time.sleep(0.3)
    page.until("return document.getElementById('place').textContent !== arguments[0]", first)


def test_blink_and_stop(page):
    page.keys("b")
    page.until("return document.documentElement.classList.contains('blinking')")
    seen = set()
    end = time.monotonic() + 4
    while len(seen) < 2 and time.monotonic() < end:
        seen.add(page.picture("spectrum"))
        time.sleep(0.1)
    assert len(seen) >= 2
    page.keys("b")
    page.until("return !document.documentElement.classList.contains('blinking')")
    time.sleep(0.6)
    still = page.picture("spectrum")
    time.sleep(1.2)
    assert page.picture("spectrum") == still


def test_pin_compare_swap(page):
    page.press("p", "legend")
    pinned = page.run("return document.querySelector('#legend .p').textContent")
    page.press(Keys.ARROW_UP)
    assert "pinned" in page.text("place") and "better in" in page.text("place")
    here = page.run("return document.querySelector('#legend .h').textContent")
    page.press("o")
    swapped = page.run("return [document.querySelector('#legend .h').textContent,"
                       "document.querySelector('#legend .p').textContent]")
    assert [s.split("template ")[1] for s in swapped] == [pinned.split("template ")[1], here.split("template ")[1]]
    assert page.run("return [...document.querySelectorAll('#evidence th')].some((t) => t.textContent === 'pin')") or \
        "No criterion" in page.text("evidence")


def test_jumps_standards_views_nudges(page):
    page.press("r")
    page.press("m")
    page.press("s", "legend")
    assert "template" not in page.run("return document.querySelector('#legend .h').textContent")
    for _ in range(8):
        if "template" in page.run("return document.querySelector('#legend .h').textContent"):
            break
        page.press("s", "legend")
    assert "template" in page.run("return document.querySelector('#legend .h').textContent")
    assert page.press("v", "view-name") == "as measured"
    assert page.press("v", "view-name") == "rectified"
    assert page.press("]", "nudges") == "velocity +10 km/s"
    assert "blur +0.5" in page.press(".", "nudges")
    assert page.press("0", "nudges") == ""
    page.keys("?")
    page.until("return document.getElementById('help').open")
    page.keys(Keys.ESCAPE)
    page.until("return !document.getElementById('help').open")


def test_light_and_dark(page):
    def paper():
        return page.run("return getComputedStyle(document.body).backgroundColor")

    first, picture = paper(), page.picture("spectrum")
    page.keys("d")
    page.until("return getComputedStyle(document.body).backgroundColor !== arguments[0]", first)
    time.sleep(0.5)
    assert page.picture("spectrum") != picture
    page.keys("d")
    page.until("return getComputedStyle(document.body).backgroundColor === arguments[0]", first)


def test_amend_accept_set_aside_undo_by_keys_alone(page, night):
    before = len(log_of(night).history())
    star = page.run("return document.querySelector('#star .big').textContent")
    page.press(Keys.ARROW_RIGHT)
    page.keys("1")
    page.until("return document.querySelector('#flags button').classList.contains('on')")
    page.keys("t")
    page.keys("wings too narrow")
    page.keys(Keys.ENTER)
    page.keys("w")
    page.keys("qx")
    page.keys(Keys.ENTER)
    page.keys("e")
    page.until("return document.activeElement.id === 'type'")
    filled = page.run("return document.getElementById('type').value")
    assert filled and filled in page.text("place")
    page.keys("K3 III")
    page.keys(Keys.ENTER)
    page.until("return document.getElementById('said').textContent.includes('amended to K3 III')")

    kept = log_of(night).current()[star]
    assert (kept.action, kept.mk_type, kept.flags, kept.remark, kept.who) == (
        "amend", "K3 III", ("emission",), "wings too narrow", "qx")
    assert kept.machine["mk_type"] and kept.machine["type_set_90"] and kept.digest and kept.when

    second = page.run("return document.querySelector('#star .big').textContent")
    assert second != star                                    # the queue goes on by itself
    page.press("a", "said")
    assert log_of(night).current()[second].action == "accept"
    page.press("x", "said")
    assert [d.action for d in log_of(night).standing()][-1] == "set aside"
    page.press("u", "said")
    page.press("u", "said")
    page.press("u", "said")
    assert "Taken back" in page.text("said")
    assert page.run("return document.querySelector('#star .big').textContent") == star
    assert len(log_of(night).standing()) == 0
    assert len(log_of(night).history()) == before + 6


def test_nonsense_is_refused_in_a_sentence(page, night):
    before = log_of(night).path.read_bytes() if log_of(night).path.exists() else b""
    page.keys("e")
    page.until("return document.activeElement.id === 'type'")
    page.keys("teapot")
    page.keys(Keys.ENTER)
    page.until("return document.getElementById('said').textContent.includes('teapot')")
    page.keys(Keys.ESCAPE)
    page.until("return !document.documentElement.classList.contains('editing')")
    assert (log_of(night).path.read_bytes() if log_of(night).path.exists() else b"") == before


def test_names_are_shown_not_obeyed(page):
    assert "<img src=x onerror" in page.text("queue")
    assert page.run("return document.querySelectorAll('img').length") == 0
    assert page.run("return document.title") != "owned"


def test_a_crash_loses_nothing(chromium, desk, night):
    page = Page(chromium, desk.address)
    star = page.run("return document.querySelector('#star .big').textContent")
    page.keys("w")
    page.run("document.getElementById('who').value = ''")
    page.keys("cr", Keys.ENTER)
    page.press("a", "said")
    assert "kept" in page.text("said")
    desk.crash()
    page.until("return getComputedStyle(document.getElementById('lost')).display === 'block'", seconds=30)
    assert str(night / "decisions.jsonl") in page.text("lost")
    old = desk.address
    desk.start()
    assert desk.address != old                               # a fresh secret each time
    page = Page(chromium, desk.address)
    queue = page.run("return [...document.querySelectorAll('#queue li.done .name')].map((n) => n.textContent)")
    assert queue == [star]
    assert page.run("return document.querySelector('#star .big').textContent") != star
    page.until("return document.getElementById('who').value === 'cr'")     # the same hand goes on
    page.press("u", "said")
    assert log_of(night).current() == {}
    assert [m for m in page.severe() if old not in m] == []    # the dead desk's page may well complain


def test_ctrl_c_says_what_was_kept(night):
    short = DeskProcess(sorted(night.glob("th17_*"))[0])
    last = short.stop()
    assert short.process.returncode == 0
    assert "Traceback" not in last and "decided" in last


@pytest.mark.parametrize("words", [[], ["no_such_file.fits"], ["PORT"]])
def test_what_cannot_be_done_is_one_sentence(words, desk, night, tmp_path):
    if words == ["PORT"]:
        words = [str(night / "th17_09.fits"), "--port", desk.origin.rsplit(":", 1)[1]]
    command = [sys.executable, "-c", "from starfathom.cli import main; main()", "desk", *words, "--no-browser"]
    done = subprocess.run(command, capture_output=True, text=True, cwd=tmp_path)
    assert done.returncode == 2
    assert "Traceback" not in done.stderr + done.stdout and done.stderr.strip()


def test_log_is_json_lines(night):
    for line in log_of(night).path.read_text(encoding="utf-8").splitlines():
        assert {"id", "name", "action", "when", "machine"} <= set(json.loads(line))
