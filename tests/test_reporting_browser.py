"""The report in a browser: offline, without an error, its plots visible."""

from __future__ import annotations

import os
import re
import shutil
import subprocess
from pathlib import Path

import pytest

from rigtally.cli.main import run

SAMPLES = Path(__file__).parents[1] / "sample_data"
FLAGS = [
    "--headless", "--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run",
    "--disable-background-networking", "--disable-component-update", "--disable-sync",
]  # fmt: skip
# runs in the page before anything else: errors are gathered, sizes are written where --dump-dom shows them
PROBE = """<script>
window.faults = [];
window.onerror = (m) => { window.faults.push(String(m)); };
const say = console.error; console.error = (...a) => { window.faults.push(a.join(" ")); say(...a); };
window.addEventListener("error", (e) => window.faults.push("resource " + (e.target.tagName || "")), true);
window.addEventListener("load", () => {
  const sizes = [...document.querySelectorAll("figure.plot svg")].map((s) => {
    const r = s.getBoundingClientRect(); return Math.round(r.width) + "x" + Math.round(r.height);
  });
  const lines = [...document.querySelectorAll("figure.plot svg path")].filter((p) => p.getTotalLength() > 20).length;
  const out = document.createElement("pre");
  out.id = "probe";
  out.textContent = "plots " + sizes.join(",") + " | lines " + lines + " | faults " + window.faults.join(";") +
    " | loaded " + performance.getEntriesByType("resource").length;
  document.body.appendChild(out);
});
</script>"""


def browser() -> str:
    """Chromium, or a skip; with CI set its absence is a failure."""
    found = shutil.which("chromium")
    if found is None:
        if os.environ.get("CI"):
            pytest.fail("Chromium is not here, and CI is set")
        pytest.skip("Chromium is not here")
    return found


def probe(page: Path, folder: Path) -> tuple[str, str]:
    """What the page says of itself, and what the browser wrote to its log."""
    copy = folder / "probed.html"
    copy.write_text(page.read_text("utf-8").replace("<head>", "<head>" + PROBE, 1), encoding="utf-8")
    done = subprocess.run(
        [browser(), *FLAGS, f"--user-data-dir={folder / 'profile'}", "--enable-logging=stderr", "--dump-dom",
         "--virtual-time-budget=5000", copy.as_uri()],
        capture_output=True, text=True, timeout=120,
    )  # fmt: skip
    said = re.search(r'<pre id="probe">(.*?)</pre>', done.stdout, re.S)
    assert said, done.stderr[-2000:]
    return said.group(1), done.stderr


@pytest.mark.browser
def test_a_tally_report_opens_without_error(tmp_path: Path) -> None:
    """No console error, nothing loaded from outside, every plot drawn at a legible size."""
    page = tmp_path / "tally.html"
    rig = SAMPLES / "impulse_line" / "rig.toml"
    logs = sorted(rig.parent.glob("line_step_*.csv"))
    assert run(["tally", *map(str, logs), str(rig), "--report", str(page), "--quiet"]) == 0
    text = page.read_text(encoding="utf-8")
    assert not re.search(r"(src|href)\s*=\s*[\"']?https?:", text), "the page must work offline"
    assert page.stat().st_size < 3_000_000
    said, log = probe(page, tmp_path)
    plots = re.findall(r"(\d+)x(\d+)", said.split("|")[0])
    assert len(plots) == len(logs) + 3  # records, frequency response, budget, network
    assert all(int(w) > 400 and int(h) > 80 for w, h in plots)
    assert int(re.search(r"lines (\d+)", said).group(1)) > 20  # type: ignore[union-attr]
    assert re.search(r"faults\s*\|", said), said
    assert "loaded 0" in said
    assert "CONSOLE" not in log or "error" not in log.lower().split("console")[1][:200]
    for word in ("Bench and model agree", "natural frequency", "SHA-256", "Provenance"):
        assert word in text


@pytest.mark.browser
def test_fit_and_inspection_reports_open(tmp_path: Path) -> None:
    """The other reports too."""
    log = SAMPLES / "impulse_line" / "line_step_1.csv"
    for command in (["fit", str(log), "--input", "p_line", "--output", "p_gauge"], ["inspect", str(log)]):
        page = tmp_path / f"{command[0]}.html"
        assert run([*command, "--report", str(page), "--quiet"]) == 0
        folder = tmp_path / command[0]
        folder.mkdir()
        said, _ = probe(page, folder)
        assert re.search(r"faults\s*\|", said), said
        assert re.findall(r"(\d+)x(\d+)", said.split("|")[0])
