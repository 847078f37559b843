"""The HTML report in a real browser: quiet, alone, readable on a phone and on paper.

Rung: behaviour. Every launch has a fresh profile and resolves no name, so that nothing leaves the machine. Each check
is first shown to fail on a page that is wrong in the way it looks for.
"""

from __future__ import annotations

import json
import re
import shutil
import subprocess
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pytest

from tests.studies.page.conftest import Node, read_page

BROWSERS = ("chromium", "chromium-browser", "google-chrome", "google-chrome-stable")
BROWSER = next((found for name in BROWSERS if (found := shutil.which(name)) is not None), None)
pytestmark = pytest.mark.skipif(BROWSER is None, reason=f"no browser here: none of {', '.join(BROWSERS)} is installed")

FLAGS = (
    "--headless", "--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run", "--no-default-browser-check",
    "--disable-background-networking", "--disable-component-update", "--disable-sync", "--disable-extensions",
    "--hide-scrollbars", "--host-resolver-rules=MAP * ~NOTFOUND", "--virtual-time-budget=3000",
    "--enable-logging=stderr", "--v=0",
)  # fmt: skip
PHONE = 390
POLICY = re.compile(r'<meta http-equiv="Content-Security-Policy"[^>]*>')

#: Put into a copy of the page, without its policy, to measure it from inside.
MEASURE = """<script>
addEventListener("load", () => {
  document.querySelectorAll("details").forEach(one => one.open = true);
  const box = one => one.getBoundingClientRect();
  const outside = one => box(one).right > innerWidth + 0.5 || box(one).left < -0.5;
  const said = {
    width: innerWidth,
    scroll: document.documentElement.scrollWidth,
    outside: [...document.querySelectorAll("body *")].filter(
      one => !one.parentElement.closest(".scroll, svg") && outside(one)).map(one => one.outerHTML.slice(0, 80)),
    letters: [...document.querySelectorAll("svg text")].filter(outside).map(one => one.textContent),
    small: [...document.querySelectorAll("svg text")].filter(
      one => one.textContent.trim() && box(one).height < 8).length,
    sections: [...document.querySelectorAll("section")].map(one => [one.id, box(one).width, box(one).height]),
    drawings: [...document.querySelectorAll("svg")].map(one => box(one).height),
    folds: document.querySelectorAll("details").length,
  };
  parent.postMessage(JSON.stringify(said), "*");
});
</script>"""
#: A window cannot be as narrow as a phone, a frame can; each frame sends what its page measured.
FRAMES = """<!DOCTYPE html><html lang="en"><head><meta charset="utf-8"><title>frames</title></head><body>
<script>addEventListener("message", event => {
  const line = document.createElement("pre");
  line.textContent = event.data;
  document.body.append(line);
});</script>
%s
</body></html>"""


@dataclass(frozen=True)
class Opened:
    """What a launch gave back: the page's elements, console messages, and addresses that the page asked for."""

    dom: str
    console: list[str]
    asked: list[str]


def launch(folder: Path, *more: str) -> subprocess.CompletedProcess[str]:
    """One headless launch with a profile of its own."""
    assert BROWSER is not None
    profile = folder / "profile"
    command = [BROWSER, *FLAGS, f"--user-data-dir={profile}", *more]
    ran = subprocess.run(command, cwd=folder, capture_output=True, encoding="utf-8", timeout=90, check=True)
    shutil.rmtree(profile, ignore_errors=True)
    return ran


def open_page(folder: Path, text: str) -> Opened:
    """Open a page from a file, as somebody who was sent it would."""
    file, log = folder / "page.html", folder / "net.json"
    file.write_text(text, encoding="utf-8")
    ran = launch(folder, f"--log-net-log={log}", "--window-size=1200,900", "--dump-dom", file.as_uri())
    console = re.findall(r"CONSOLE:?\d*\S* (.*)", ran.stderr)
    return Opened(dom=ran.stdout, console=console, asked=_asked(json.loads(log.read_text(encoding="utf-8"))))


def _asked(log: dict[str, Any]) -> list[str]:
    """Addresses asked for by a page; what the browser asks for itself is marked as of no origin."""
    started = log["constants"]["logEventTypes"]["URL_REQUEST_START_JOB"]
    asked = [event["params"] for event in log["events"] if event["type"] == started and "url" in event["params"]]
    return [one["url"] for one in asked if one.get("initiator") != "not an origin"]


def measured(folder: Path, text: str, *widths: int) -> list[dict[str, Any]]:
    """What the page measures of itself in frames of these widths."""
    (folder / "measured.html").write_text(POLICY.sub("", text).replace("</body>", f"{MEASURE}</body>"), "utf-8")
    frames = "".join(f'<iframe src="measured.html" width="{width}" height="800"></iframe>' for width in widths)
    (folder / "frames.html").write_text(FRAMES % frames, encoding="utf-8")
    dom = launch(folder, "--window-size=1400,900", "--dump-dom", (folder / "frames.html").as_uri()).stdout
    found: list[dict[str, Any]] = [json.loads(line.text) for line in read_page(dom).all("pre")]
    assert sorted(one["width"] for one in found) == sorted(widths)
    return sorted(found, key=lambda one: widths.index(one["width"]))


def printed(folder: Path, text: str) -> list[tuple[float, float]]:
    """Width and height of every sheet in points, and that each holds something."""
    (folder / "page.html").write_text(text, encoding="utf-8")
    launch(folder, "--no-pdf-header-footer", f"--print-to-pdf={folder / 'page.pdf'}", (folder / "page.html").as_uri())
    made = (folder / "page.pdf").read_bytes()
    assert made.startswith(b"%PDF-")
    sheets = re.findall(rb"/Type\s*/Page\b(?!s)", made)
    boxes = [box.split() for box in re.findall(rb"/MediaBox\s*\[([^\]]*)\]", made)]
    assert len(boxes) == len(sheets) == len(re.findall(rb"/Contents\b", made))
    return [(float(right) - float(left), float(top) - float(bottom)) for left, bottom, right, top in boxes]


@pytest.fixture(scope="module")
def opened(page: str, tmp_path_factory: pytest.TempPathFactory) -> Opened:
    """The report as it is."""
    return open_page(tmp_path_factory.mktemp("opened"), page)


def test_nothing_is_said_on_the_console_and_nothing_asked_for(opened: Opened, tree: Node) -> None:
    assert opened.console == []
    assert opened.asked == []
    shown = read_page(opened.dom)
    assert [one.attributes.get("id") for one in shown.all("section")] == [
        one.attributes["id"] for one in tree.all("section")
    ]
    # the browser read the same words as the file holds: nothing was moved or dropped for bad nesting
    assert shown.one("body").words == tree.one("body").words


def test_without_its_policy_it_still_asks_for_nothing(page: str, tmp_path: Path) -> None:
    free, count = POLICY.subn("", page)
    assert count == 1
    found = open_page(tmp_path, free)
    assert (found.console, found.asked) == ([], [])


def test_a_page_that_asks_or_talks_would_be_found(tmp_path: Path) -> None:
    # shows that the two tests above can fail
    bad = '<!DOCTYPE html><title>t</title><img src="http://pictures.test/a.png"><script>console.log("hello")</script>'
    found = open_page(tmp_path, bad)
    assert found.asked == ["http://pictures.test/a.png"]
    assert len(found.console) == 1
    assert '"hello"' in found.console[0]


def test_the_policy_stops_what_somebody_puts_in(page: str, tmp_path: Path) -> None:
    bad = '<main><img src="http://pictures.test/a.png"><script>document.title = "changed"</script>'
    found = open_page(tmp_path, page.replace("<main>", bad, 1))
    assert found.asked == []
    assert len(found.console) == 2
    assert all("Content Security Policy" in line for line in found.console)
    assert "<title>changed" not in found.dom


def test_it_fits_a_phone_and_a_desk(page: str, tree: Node, tmp_path: Path) -> None:
    ids = [section.attributes["id"] for section in tree.all("section")]
    for one in measured(tmp_path, page, PHONE, 1200):
        width = one["width"]
        assert one["scroll"] == width
        assert one["outside"] == []
        assert one["letters"] == []
        assert one["small"] == 0
        assert one["folds"] == len(tree.all("details")) > 3
        assert [name for name, _, _ in one["sections"]] == ids
        assert all(wide > 0.6 * min(width, 832) and high > 100 for _, wide, high in one["sections"])
        assert len(one["drawings"]) == len(tree.all("svg"))
        assert min(one["drawings"]) > 60


def test_a_page_too_wide_for_a_phone_would_be_found(page: str, tmp_path: Path) -> None:
    wide = page.replace("<main>", '<main><div style="width: 700px">wide</div>', 1)
    phone, desk = measured(tmp_path, wide, PHONE, 1200)
    assert phone["scroll"] > PHONE
    assert len(phone["outside"]) == 1
    assert (desk["scroll"], desk["outside"]) == (1200, [])


def test_it_prints_on_sheets_of_one_size_with_its_folds(page: str, tmp_path: Path) -> None:
    sheets = printed(tmp_path, page)
    assert 8 <= len(sheets) <= 25
    # A4 is 210 by 297 mm, letter 8.5 by 11 inches; a point is 1/72 inch
    (size,) = {(round(width), round(height)) for width, height in sheets}
    assert size in {(595, 842), (612, 792)}
    # folded tables are printed, but for the long list of rolls: with them gone there is less to print
    folds = re.findall(r"<details>.*?</details>", page, re.DOTALL)
    assert len(folds) > 3
    shorter = page
    for fold in folds:
        shorter = shorter.replace(fold, "")
    assert len(printed(tmp_path, shorter)) < len(sheets)
