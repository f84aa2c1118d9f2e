"""The report in a headless browser: nothing wider than the screen, nothing cut, no complaint."""

import html
import json
import os
import re
import shutil
import subprocess
from collections.abc import Callable
from pathlib import Path

import pytest

from idlearn.reports import build_report

# The wrapper looks into a frame of the width wanted; a window of 375 pixels is narrower than some
# browsers allow.
_WRAPPER = """<!DOCTYPE html><title>none</title><body style="margin:0">
<iframe style="width:%dpx;height:900px;border:0" srcdoc="%s"></iframe><script>
document.querySelector("iframe").addEventListener("load", (event) => {
  const page = event.target.contentDocument, root = page.documentElement;
  const wide = [], cut = [], seen = (e) => e.getClientRects().length > 0;
  for (const e of page.body.querySelectorAll("*")) {
    const box = e.getBoundingClientRect();
    if (seen(e) && !e.closest("svg, thead") && box.right > root.clientWidth + 1)
      wide.push(e.tagName + " " + e.textContent.slice(0, 40));
  }
  for (const e of page.querySelectorAll("svg text")) {
    const box = e.getBoundingClientRect(), whole = e.closest("svg").getBoundingClientRect();
    if (seen(e) && (box.right > whole.right + 2 || box.left < whole.left - 2
        || box.bottom > whole.bottom + 2 || box.top < whole.top - 2)) cut.push(e.textContent);
  }
  document.title = JSON.stringify({scroll: root.scrollWidth, client: root.clientWidth,
    images: page.images.length, texts: page.querySelectorAll("svg text").length,
    wide: wide.slice(0, 9), cut: cut.slice(0, 9)});
});
</script>"""


@pytest.fixture(scope="module")
def browser() -> str:
    """Return the browser's command."""
    found = next(
        (p for n in ("chromium", "chromium-browser", "google-chrome") if (p := shutil.which(n))),
        None,
    )
    if found is None:
        if os.environ.get("IDLEARN_STRICT") == "1":
            pytest.fail("no headless Chromium on this machine, and IDLEARN_STRICT=1 asks for one")
        pytest.skip("no Chromium on this machine; install the package chromium")
    return found


def visit(browser: str, page: Path, profile: Path) -> tuple[str, str]:
    """Return the page's document after loading, and what the browser had to say."""
    done = subprocess.run(
        [
            browser,
            "--headless",
            "--no-sandbox",
            "--disable-gpu",
            "--disable-quic",
            "--no-first-run",
            "--disable-background-networking",
            "--disable-component-update",
            "--disable-sync",
            f"--user-data-dir={profile}",
            "--enable-logging=stderr",
            "--virtual-time-budget=8000",
            "--window-size=1400,900",
            "--dump-dom",
            page.as_uri(),
        ],
        capture_output=True,
        text=True,
        timeout=120,
        check=True,
    )
    return done.stdout, done.stderr


@pytest.mark.parametrize("width", [375, 1280])
def test_nothing_is_cut_or_wider_than_the_screen(
    browser: str, invent: Callable[..., Path], tmp_path: Path, width: int
) -> None:
    folder = invent(
        outcome="undecided",
        outputs=("<img src=x onerror=alert(1)>", "a_long_tag_" * 9),
        actuators=("valve of the second heating zone, north side, behind the mill",),
        candidate="learned_controller_with_a_name_that_never_ends_" * 2,
    )
    report = build_report(folder).read_text(encoding="utf-8")
    wrapper = tmp_path / "wrapper.html"
    wrapper.write_text(_WRAPPER % (width, html.escape(report, quote=True)), encoding="utf-8")
    dom, _ = visit(browser, wrapper, tmp_path / "profile")
    title = re.search(r"<title>(.*?)</title>", dom, flags=re.S)
    assert title is not None
    seen = json.loads(html.unescape(title[1]))
    assert seen["texts"] > 200
    assert seen["images"] == 0
    assert seen["wide"] == []
    assert seen["cut"] == []
    assert seen["scroll"] <= width


def test_the_browser_has_nothing_to_complain_about(
    browser: str, invent: Callable[..., Path], tmp_path: Path
) -> None:
    report = build_report(invent(outputs=("<img src=x onerror=alert(1)>",)))
    dom, said = visit(browser, report, tmp_path / "profile")
    assert "Words" in dom
    assert not re.search(r"CONSOLE|Refused to|Content Security Policy", said)
