"""The report in a real browser: fits desktop and phone, fetches nothing, shows its pictures."""

import json
import re
import shutil
import subprocess

import pytest

pytestmark = pytest.mark.slow
BROWSER = shutil.which("chromium")
QUIET = [
    "--headless",
    "--no-sandbox",
    "--disable-gpu",
    "--disable-quic",
    "--no-first-run",
    "--disable-sync",
    "--disable-background-networking",
    "--disable-component-update",
    "--allow-file-access-from-files",
    "--virtual-time-budget=5000",
    "--dump-dom",
]
PROBE = """<!doctype html><title>probe</title>
<iframe id="page" src="{page}" style="width:{width}px;height:900px;border:0"></iframe>
<script>
document.getElementById("page").onload = event => {{
  const page = event.target.contentDocument;
  const shown = [...page.querySelectorAll("figure svg")].filter(
    picture => picture.getBoundingClientRect().width > 0);
  const found = {{
    overflow: page.documentElement.scrollWidth - {width},
    pictures: shown.length,
    widest: Math.max(...shown.map(picture => picture.getBoundingClientRect().right)),
    fetched: event.target.contentWindow.performance.getEntriesByType("resource").length,
    heading: page.querySelector("h1").textContent,
  }};
  document.title = JSON.stringify(found);
}};
</script>"""


@pytest.mark.skipif(BROWSER is None, reason="chromium is not installed")
@pytest.mark.parametrize("width", [1280, 390])
def test_the_page_fits_and_is_whole(demo, tmp_path, width):
    page = (demo.results / "report.html").as_uri()
    probe = tmp_path / "probe.html"
    probe.write_text(PROBE.format(page=page, width=width), encoding="utf-8")
    command = [BROWSER, *QUIET, f"--user-data-dir={tmp_path / 'profile'}", probe.as_uri()]
    done = subprocess.run(command, capture_output=True, text=True, check=True, timeout=120)
    found = json.loads(re.search(r"<title>(\{.*?\})</title>", done.stdout).group(1))
    assert found["overflow"] <= 0
    assert found["widest"] <= width
    assert found["pictures"] >= 8
    assert found["fetched"] == 0
    assert found["heading"].strip() == "invented-actuator"
