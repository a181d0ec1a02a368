"""A real browser that looks at the pages, and finished folders of pages to look at."""

from __future__ import annotations

import json
import os
import re
import shutil
import subprocess
from dataclasses import dataclass
from html import unescape
from typing import TYPE_CHECKING, Any

import page_views
import pytest

import dashboards

if TYPE_CHECKING:
    from pathlib import Path

_OPTIONS = (
    "--headless=new",
    "--no-sandbox",
    "--disable-gpu",
    "--disable-quic",
    "--no-first-run",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
    "--hide-scrollbars",
    "--host-resolver-rules=MAP * ~NOTFOUND",
    "--virtual-time-budget=10000",
)
_CONSOLE = re.compile(r":CONSOLE[:(]\d+\)?\] (.*)")
# What the browser itself asks its maker has no page for an origin; a page from a file is "null".
_ADDRESS = re.compile(r'"initiator":"(?!not an origin)[^"]*"[^\n]*?"url":"((?:http|ws)s?://[^"]*)"')

# Runs after the page's own scripts, beside them in the folder as the policy of the page asks.
_PROBE = """
"use strict";
window.addEventListener("load", function () {
  const box = (node) => node.getBoundingClientRect();
  const seen = (node) => { const b = box(node); return b.width > 0 && b.height > 0; };
  const charts = Array.from(document.querySelectorAll(".chart"), function (chart) {
    const frame = box(chart);
    const texts = Array.from(chart.querySelectorAll("svg text"))
      .filter((text) => seen(text) && text.textContent.trim() !== "");
    const labels = texts.filter((text) => text.classList.contains("node-label")).map(box);
    let crossings = 0;
    labels.forEach((a, i) => labels.slice(i + 1).forEach((b) => {
      const wide = Math.min(a.right, b.right) - Math.max(a.left, b.left);
      const tall = Math.min(a.bottom, b.bottom) - Math.max(a.top, b.top);
      if (wide > 2 && tall > 2) { crossings += 1; }
    }));
    return {
      id: chart.id,
      drawn: chart.querySelectorAll("svg.main-svg").length > 0,
      shapes: chart.querySelectorAll(
        ".scatterlayer path, .barlayer path, .sankey path, .scatterlayer .text text").length,
      cut: texts.filter((text) => {
        const b = box(text);
        return b.left < frame.left - 2 || b.right > frame.right + 2
          || b.top < frame.top - 2 || b.bottom > frame.bottom + 2;
      }).map((text) => text.textContent),
      crossings: crossings,
      label: chart.getAttribute("aria-label"),
      text: texts.map((text) => text.textContent),
      first: chart.data ? chart.data.map((trace) => trace.x ? trace.x[0] : null) : [],
      last: chart.data ? chart.data.map((trace) => trace.x ? trace.x[trace.x.length - 1] : null)
        : [],
    };
  });
  const widths = () => Array.from(
    document.querySelectorAll(".chart:not(.screen-only) svg.main-svg:first-child"),
    (svg) => svg.width.baseVal.value);
  const onScreen = widths();
  window.dispatchEvent(new Event("beforeprint"));
  const onPaper = widths();
  window.dispatchEvent(new Event("afterprint"));
  document.documentElement.dataset.probe = JSON.stringify({
    charts: charts,
    width: document.documentElement.scrollWidth,
    client: document.documentElement.clientWidth,
    files: Array.from(document.querySelectorAll("[src], link[href]"),
      (node) => node.src || node.href),
    scripts: document.querySelectorAll("script").length,
    text: document.body.innerText,
    images: document.images.length,
    ledgerEnds: document.querySelector("#ledger ~ .scroll table")
      ? box(document.querySelector("#ledger ~ .scroll table")).bottom : 0,
    onScreen: onScreen,
    onPaper: onPaper,
    again: widths(),
    owned: typeof window.owned,
  });
});
"""
_ONLY_FIRST_PAGE = """
"use strict";
document.querySelectorAll(".details, footer").forEach((node) => node.remove());
"""


@dataclass(frozen=True)
class Look:
    """What the browser saw of a page."""

    console: list[str]
    probe: dict[str, Any]
    network: list[str]
    """Every address on a network that the page asked for."""


@dataclass(frozen=True)
class Browser:
    program: str
    profile: Path

    def _run(self, *options: str) -> subprocess.CompletedProcess[str]:
        return subprocess.run(
            [self.program, *_OPTIONS, f"--user-data-dir={self.profile}", *options],
            check=True,
            capture_output=True,
            text=True,
            timeout=120,
        )

    def look(self, page: Path, width: int = 1280) -> Look:
        copy = _with_script(page, _PROBE)
        log = page.with_suffix(".network.json")
        done = self._run(
            f"--window-size={width},900",
            "--enable-logging=stderr",
            "--v=0",
            f"--log-net-log={log}",
            "--dump-dom",
            copy.as_uri(),
        )
        found = re.search(r'data-probe="([^"]*)"', done.stdout)
        assert found is not None, f"the probe did not run:\n{done.stderr}"
        return Look(
            _CONSOLE.findall(done.stderr),
            json.loads(unescape(found[1])),
            _ADDRESS.findall(log.read_text(encoding="utf-8")),
        )

    def paper_pages(self, page: Path, *, only_first_page: bool = False) -> int:
        if only_first_page:
            page = _with_script(page, _ONLY_FIRST_PAGE)
        paper = page.with_suffix(".pdf")
        self._run("--no-pdf-header-footer", f"--print-to-pdf={paper}", page.as_uri())
        return len(re.findall(rb"/Type\s*/Page\b", paper.read_bytes()))


def _with_script(page: Path, script: str) -> Path:
    """Put a script of the test beside the page and a copy of the page that runs it."""
    (page.parent / "probe.js").write_text(script, encoding="utf-8")
    copy = page.with_name(f"probed-{page.name}")
    html = page.read_text(encoding="utf-8")
    copy.write_text(html.replace("</head>", '<script src="probe.js" defer></script></head>', 1),
                    encoding="utf-8")  # fmt: skip
    return copy


@pytest.fixture(scope="session")
def browser(tmp_path_factory):
    program = shutil.which("chromium") or shutil.which("chromium-browser")
    if program is None:
        reason = "no chromium in PATH: the pages were not looked at"
        if os.environ.get("CI") == "true":
            pytest.fail(reason)
        pytest.skip(reason)
    return Browser(program, tmp_path_factory.mktemp("profile"))


def _written(folder: Path, overview, equipment, costs, dead_state, shift) -> dict[str, Path]:
    dashboards.write_assets(folder)
    return {
        "overview": dashboards.write_overview(overview, folder),
        "equipment": dashboards.write_equipment(equipment, folder),
        "costs": dashboards.write_costs(costs, folder),
        "dead state": dashboards.write_dead_state(dead_state, folder),
        "shift": dashboards.write_shift(shift, folder),
    }


@pytest.fixture(scope="session")
def full_pages(tmp_path_factory):
    return _written(
        tmp_path_factory.mktemp("full"),
        page_views.overview(),
        page_views.equipment(),
        page_views.costs(),
        page_views.dead_state(),
        page_views.shift(),
    )


@pytest.fixture(scope="session")
def empty_pages(tmp_path_factory):
    return _written(
        tmp_path_factory.mktemp("empty"),
        page_views.empty_overview(),
        page_views.young_equipment(),
        page_views.empty_costs(),
        page_views.empty_dead_state(),
        page_views.empty_shift(),
    )


@pytest.fixture(scope="session")
def hostile_pages(tmp_path_factory):
    return _written(
        tmp_path_factory.mktemp("hostile"),
        page_views.poisoned(page_views.overview()),
        page_views.poisoned(page_views.equipment()),
        page_views.poisoned(page_views.costs()),
        page_views.poisoned(page_views.dead_state()),
        page_views.poisoned(page_views.shift()),
    )
