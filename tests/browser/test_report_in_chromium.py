"""The report in a real browser, at desktop and phone width: it opens quietly and nothing sticks out.

Run with `pytest -m browser`; Chromium must be installed. The probe is added to a copy of the page whose own policy,
which refuses every script, is taken out; the console is watched on the page as written.
"""

import json
import os
import re
import shutil
import subprocess
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from keelbook.outputs.report import write_report

pytestmark = pytest.mark.browser

WIDTHS = {"desktop": 1280, "phone": 390}

PROBE = """
<script>
document.querySelectorAll("details").forEach(d => { d.open = true; });
const charts = [...document.querySelectorAll("svg")];
const seen = charts.filter(s => s.getClientRects().length > 0);
const size = s => s.getBoundingClientRect();
const words = seen.flatMap(s => [...s.querySelectorAll("text")]);
const edge = document.documentElement.clientWidth;
parent.postMessage(JSON.stringify({
  width: window.innerWidth,
  scroll: document.documentElement.scrollWidth,
  charts: charts.length,
  seen: seen.length,
  empty: seen.filter(s => !(size(s).width > 100 && size(s).height > 40)).length,
  outside: words.filter(w => size(w).right > edge + 0.5 || size(w).left < -0.5).map(w => w.textContent),
  smallest: Math.min(...words.map(w => size(w).height)),
}), "*");
</script>
"""

HOLDER = """<!doctype html><title>holder</title><body>
<script>addEventListener("message", e => { document.body.dataset.probe = e.data; });</script>
<iframe src="probed.html" style="border:0;height:900px;width:%dpx"></iframe></body>"""
"""A window cannot be as narrow as a phone, a frame can; the page takes the frame for its window."""


@pytest.fixture(scope="module")
def chromium() -> str:
    """Return the browser; it is an error, not a pass, if there is none."""
    for name in ("chromium", "chromium-browser", "google-chrome"):
        found = shutil.which(name)
        if found:
            return found
    raise RuntimeError("no Chromium on this machine: install it (apt-get install chromium)")


@pytest.fixture
def open_page(chromium: str, tmp_path: Path) -> Callable[[Path], tuple[str, list[str]]]:
    """Return a function: page -> the page as the browser holds it, and what its console said."""

    def run(page: Path) -> tuple[str, list[str]]:
        done = subprocess.run(
            [
                chromium, "--headless", "--disable-gpu", "--disable-quic", "--no-first-run",
                "--disable-background-networking", "--disable-component-update", "--disable-sync",
                "--enable-logging=stderr", f"--user-data-dir={tmp_path / 'profile'}", "--window-size=1400,1000",
                "--virtual-time-budget=4000",
                *(["--no-sandbox"] if os.geteuid() == 0 else []),
                "--dump-dom", page.as_uri(),
            ],
            capture_output=True, text=True, check=True, timeout=120,
        )  # fmt: skip
        return done.stdout, [line for line in done.stderr.splitlines() if "CONSOLE" in line]

    return run


@pytest.fixture(scope="module")
def page(demo_build: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    out = tmp_path_factory.mktemp("report") / "report.html"
    write_report(demo_build, out)
    return out


def holder(page: Path, folder: Path, width: int, more: str = "") -> Path:
    """Write the page with the probe, and the page that holds it in a frame of a width; return the latter."""
    text = page.read_text(encoding="utf-8")
    text, policies = re.subn(r'<meta http-equiv="Content-Security-Policy"[^>]*>', "", text)
    assert policies == 1
    (folder / "probed.html").write_text(text.replace("</body>", f"{more}{PROBE}</body>"), encoding="utf-8")
    out = folder / "holder.html"
    out.write_text(HOLDER % width, encoding="utf-8")
    return out


def measured(dom: str) -> dict[str, Any]:
    (held,) = re.findall(r'data-probe="([^"]+)"', dom)
    result: dict[str, Any] = json.loads(held.replace("&quot;", '"').replace("&amp;", "&"))
    return result


@pytest.mark.parametrize("width", WIDTHS.values(), ids=WIDTHS.keys())
def test_every_chart_is_seen_and_nothing_sticks_out(
    open_page: Callable[[Path], tuple[str, list[str]]], page: Path, tmp_path: Path, width: int
) -> None:
    dom, _ = open_page(holder(page, tmp_path, width))
    found = measured(dom)
    assert found["width"] == width
    assert found["scroll"] <= width
    assert found["empty"] == 0
    assert found["outside"] == []
    assert found["charts"] > found["seen"] >= 20
    assert found["smallest"] >= 9


def test_the_probe_sees_what_is_too_wide_and_what_has_no_size(
    open_page: Callable[[Path], tuple[str, list[str]]], page: Path, tmp_path: Path
) -> None:
    wrong = '<div style="width:900px;height:1px"></div><svg style="width:1px;height:1px"></svg>'
    dom, _ = open_page(holder(page, tmp_path, WIDTHS["phone"], wrong))
    found = measured(dom)
    assert found["scroll"] >= 900
    assert found["empty"] == 1


def test_the_console_stays_silent(open_page: Callable[[Path], tuple[str, list[str]]], page: Path) -> None:
    dom, said = open_page(page)
    assert said == []
    assert "</html>" in dom


def test_a_script_that_got_in_would_not_run_and_would_be_heard(
    open_page: Callable[[Path], tuple[str, list[str]]], page: Path, tmp_path: Path
) -> None:
    spoilt = tmp_path / "spoilt.html"
    text = page.read_text(encoding="utf-8")
    script = "<script>document.body.dataset.ran = 1</script></body>"
    spoilt.write_text(text.replace("</body>", script), encoding="utf-8")
    dom, said = open_page(spoilt)
    assert "data-ran" not in dom
    assert len(said) == 1
    assert "Content Security Policy" in said[0]
