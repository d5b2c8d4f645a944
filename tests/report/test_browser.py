"""The report in a real browser, Chromium without a window; skipped by name where there is none."""

import json
import re
import shutil
import subprocess

import pytest

from roa.report import figures
from roa.report.draw import draw_figures
from roa.report.html import report_html

BROWSER = shutil.which("chromium") or shutil.which("chromium-browser") or shutil.which("google-chrome")

pytestmark = pytest.mark.skipif(BROWSER is None, reason="no Chromium on this machine")

# Contrast as in WCAG 2.2, "contrast ratio" and "relative luminance" (from memory).
PROBE = r"""
<script>
const problems = [];
window.addEventListener("error", event => problems.push(String(event.message)));
window.addEventListener("load", () => {
  const channels = text => (text.match(/[\d.]+/g) || []).map(Number);
  const luminance = ([r, g, b]) => [r, g, b].map(c => c / 255)
    .map(c => c <= 0.04045 ? c / 12.92 : ((c + 0.055) / 1.055) ** 2.4)
    .reduce((sum, c, k) => sum + c * [0.2126, 0.7152, 0.0722][k], 0);
  const ground = element => {
    for (let e = element; e; e = e.parentElement) {
      const c = channels(getComputedStyle(e).backgroundColor);
      if (c.length === 3 || c[3] === 1) return c;
    }
    return [255, 255, 255];
  };
  let lowest = 100, worst = "", letters = 0;
  const walker = document.createTreeWalker(document.body, NodeFilter.SHOW_TEXT);
  while (walker.nextNode()) {
    const element = walker.currentNode.parentElement, text = walker.currentNode.data.trim();
    if (!text || ["SCRIPT", "STYLE", "PRE-RESULT"].includes(element.tagName)) continue;
    letters += text.length;
    const a = luminance(channels(getComputedStyle(element).color)), b = luminance(ground(element));
    const ratio = (Math.max(a, b) + 0.05) / (Math.min(a, b) + 0.05);
    if (ratio < lowest) [lowest, worst] = [ratio, text];
  }
  const result = document.createElement("pre-result");
  result.hidden = true;
  result.textContent = JSON.stringify({
    problems, lowest, worst, letters,
    pictures: [...document.images].map(image => [image.alt.length, image.complete, image.naturalWidth, image.width]),
    requests: performance.getEntriesByType("resource").map(one => one.name).filter(name => !name.startsWith("data:")),
    wider: document.documentElement.scrollWidth - window.innerWidth,
  });
  document.body.append(result);
});
</script>
"""


@pytest.fixture
def page(tmp_path, evidence, configuration, claimed):
    verdict = claimed()
    evidence.__dict__["verdict"] = verdict
    draw_figures(tmp_path, evidence, formats=("svg",))
    drawn = {file.stem: file.read_bytes() for file in tmp_path.glob("*.svg")}
    assert set(drawn) == set(figures.names()) - {"slices"}
    text = report_html(verdict, configuration, drawn)
    path = tmp_path / "report.html"
    path.write_text(text.replace("<head>", f"<head>{PROBE}", 1), encoding="utf-8")
    return path


@pytest.mark.slow
def test_no_error_no_request_every_picture_and_readable_text(page, tmp_path):
    for width in (1280, 500):
        done = subprocess.run(
            [
                BROWSER, "--headless", "--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run",
                "--disable-background-networking", "--disable-component-update", "--disable-sync",
                f"--user-data-dir={tmp_path / str(width)}", f"--window-size={width},1200", "--enable-logging=stderr",
                "--virtual-time-budget=20000", "--dump-dom", page.as_uri(),
            ],
            capture_output=True, text=True, timeout=120, check=True,
        )  # fmt: skip
        assert "CONSOLE" not in done.stderr
        found = re.search(r"<pre-result[^>]*>(.*?)</pre-result>", done.stdout, re.DOTALL)
        result = json.loads(found.group(1).replace("&gt;", ">").replace("&lt;", "<").replace("&amp;", "&"))
        assert result["problems"] == []
        assert result["requests"] == []
        assert result["letters"] > 2000
        assert result["lowest"] >= 4.5, result["worst"]
        assert result["wider"] <= 0
        assert len(result["pictures"]) >= 5
        for alternative, complete, natural, shown in result["pictures"]:
            assert alternative > 40
            assert complete
            assert natural > 0
            assert shown > 300
