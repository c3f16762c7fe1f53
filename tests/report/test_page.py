"""report.html: the verdict, nothing from outside, and a look at it with a real browser where there is one."""

import copy
import html
import json
import re
import shutil
import subprocess

import numpy as np
import pytest

from fitter import InputError, Sample, fit
from fitter.report.page import fit_html, page_text, verdict
from fitter.report.terminal import cell_text
from fitter.sharing import write_page

BROWSER = next((path for name in ("chromium", "chromium-browser", "google-chrome") if (path := shutil.which(name))), None)
in_browser = pytest.mark.skipif(BROWSER is None, reason="no Chromium here (Debian: apt-get install chromium)")

SAMPLING = {"replicas": 2, "walkers": 32, "target_ess": 400}

# Runs in the page: what a reader would do, and what would annoy.
PROBE = """<script>
var failures = []; addEventListener("error", function (e) { failures.push(String(e.message || e.target.src)); }, true);
addEventListener("load", function () { setTimeout(function () {
  var page = document.documentElement, before = page.scrollWidth - innerWidth, zoom = document.getElementById("zoom");
  var first = document.querySelector("figure button"); first.focus(); var focused = document.activeElement === first; first.click();
  var opened = zoom.open && zoom.querySelector("img").naturalWidth > 0; zoom.querySelector("[data-close]").click();
  document.querySelectorAll("[data-copy]").forEach(function (b) { b.click(); });
  document.querySelectorAll("details").forEach(function (d) { d.open = true; });
  var small = [].filter.call(document.querySelectorAll("button"), function (b) { return b.offsetHeight && b.offsetHeight < 40; }).length;
  var missing = [].filter.call(document.querySelectorAll("[href^='#']"), function (a) { return !document.querySelector(a.hash); }).length;
  var images = [].map.call(document.querySelectorAll("figure img"), function (i) { return i.naturalWidth; });
  var outside = performance.getEntriesByType("resource").map(function (r) { return r.name; })
    .filter(function (n) { return !n.startsWith("data:"); });
  var top = document.querySelector(".verdict").getBoundingClientRect(), ids = [].map.call(document.querySelectorAll("[id]"), function (e) {
    return e.id; });
  setTimeout(function () {
    document.title = "PROBE" + JSON.stringify({failures: failures, overflow: [before, page.scrollWidth - innerWidth],
      opened: opened,      closed: !zoom.open, small: small, missing: missing, images: images, outside: outside, width: innerWidth,
      verdict: top.bottom + scrollY,
      twice: ids.length - new Set(ids).size,
      focusable: focused && document.activeElement.hasAttribute("data-copy"), said: document.getElementById("said").textContent,
      back: getComputedStyle(document.body).backgroundColor, ink: getComputedStyle(document.body).color}) + "END";
  }, 500);
}, 200); });
</script>"""


@pytest.fixture(scope="module")
def run(tmp_path_factory):
    rng = np.random.default_rng(2)
    z = np.linspace(0.02, 0.9, 60)
    mu = 5 * np.log10(z * (1 + 0.775 * z)) + 43.16 + 0.1 * rng.standard_normal(60)
    sample = Sample.from_arrays(z, mu, sigma=0.1, distance_scale="absolute")
    folder = tmp_path_factory.mktemp("page") / "rün folder"
    return fit(title="Sixty <b> & “more”", sample=sample, model="flat_lcdm", sampling=SAMPLING, run_folder=folder)


@pytest.fixture(scope="module")
def page(run):
    return (run.run_folder / "report.html").read_text(encoding="utf-8")


def test_the_page_says_what_the_summary_says(run, page):
    summary = run.summary()
    text = html.unescape(re.sub(r"<[^>]*>", "", page.split("<main>")[1].split("</main>")[0]))
    assert text.index("Sound.") < text.index(summary["warnings"][0]) < text.index("median, 68 %")
    assert all(warning in text for warning in summary["warnings"])
    assert "<b>" not in page and "Sixty &lt;b&gt; &amp;" in page
    for told in (f"χ² = {summary['best_fit']['chi2']:.2f}", summary["sample"]["sha256"], "uniform(0, 1)", r"\toprule", "The two agree"):
        assert told in text, told
    assert (run.run_folder / "config.yaml").read_text(encoding="utf-8") in html.unescape(page)
    assert summary["provenance"]["config_sha256"] in text


def test_nothing_comes_from_outside(page):
    attributes = re.findall(r'(?:src|href|srcset|action|poster)="([^"]*)"', page)
    assert attributes and all(a.startswith(("data:", "#")) for a in attributes)
    assert not re.search(r"@import|url\(", page)
    assert page.count('src="data:image/svg+xml;base64,') == 2


def test_the_page_can_be_made_again(run, page):
    again = write_page(run.run_folder).read_text(encoding="utf-8")
    assert again.split("<h2")[1] == page.split("<h2")[1]
    assert again.count("<figure>") == page.count("<figure>")


def test_verdicts(run):
    good = run.summary()
    assert verdict(good)[0] == "good"
    cases = [
        ("sampling", {"converged": False, "advice": "Run longer."}, "bad", "Not to be used yet"),
        ("cross_check", {"agrees": False}, "bad", "two methods disagree"),
        ("best_fit", {"p_value": 1e-9}, "mind", "do not describe the data"),
        ("best_fit", {"p_value": 1 - 1e-9}, "mind", "errors are too large"),
        ("cross_check", {"agrees": None}, "mind", "without a second opinion"),
    ]
    for section, change, kind, words in cases:
        summary = copy.deepcopy(good)
        summary[section].update(change)
        found = verdict(summary)
        assert found[0] == kind and words in found[1], (section, change)
        assert words in page_text(summary, "", {})
    bare = {
        **copy.deepcopy(good),
        "cross_check": None,
        "provenance": {},
        "sample": {**good["sample"], "terms": []},
        "warnings": [],
        "cautions": [],
    }
    assert "Nothing in this run calls for a warning" in page_text(bare, "", {})


def test_a_blinded_page_shows_no_value(run, tmp_path):
    """Neither in a table nor in a figure, of which only those of shifted parameters are there; and it is not made again from outside."""
    blind = fit(sample=run.sample, model="flat_lcdm", sampling=SAMPLING, blind=True, run_folder=tmp_path / "blind")
    page = (blind.run_folder / "report.html").read_text(encoding="utf-8")
    assert "Central values are hidden" in page and "Hubble diagram" not in page
    for name in ("omega_m", "H0", "age_gyr"):
        assert cell_text(run.summary()["parameters"][name]) not in html.unescape(page)
    with pytest.raises(InputError, match="hidden"):
        write_page(blind.run_folder)


@in_browser
@pytest.mark.parametrize("width", [380, 820, 1400])
def test_in_a_browser(page, tmp_path, width):
    """No error, nothing missing, no sideways scrolling, buttons that a finger hits, a dialog that opens and closes."""
    dark = width == 820
    found = _probe(page, tmp_path, width, ["--blink-settings=preferredColorScheme=0"] if dark else [])
    assert found["failures"] == [] and found["outside"] == [] and found["missing"] == found["twice"] == 0
    assert found["opened"] and found["closed"] and found["focusable"]
    assert len(found["images"]) == 2 and min(found["images"]) > 100
    assert max(found["overflow"]) <= 0, f"the page is wider than the screen of {found['width']}"
    assert found["small"] == 0 and found["verdict"] < 800
    assert found["said"]
    back, ink = (sum(map(int, re.findall(r"\d+", found[key])[:3])) for key in ("back", "ink"))
    assert (back < ink) is dark


@in_browser
def test_in_print(run, tmp_path):
    target = tmp_path / "page.pdf"
    shutil.copy(run.run_folder / "report.html", tmp_path / "page.html")
    _browse(tmp_path, [f"--print-to-pdf={target}", (tmp_path / "page.html").as_uri()])
    assert target.read_bytes().startswith(b"%PDF") and target.stat().st_size > 20_000


def _browse(folder, arguments):
    options = ["--headless", "--no-sandbox", "--disable-gpu", "--hide-scrollbars", "--no-first-run", f"--user-data-dir={folder}/profile"]
    return subprocess.run([BROWSER, *options, *arguments], capture_output=True, text=True, timeout=120).stdout


def _probe(page, folder, width, options):
    file = folder / "probe.html"
    file.write_text(page.replace("</head>", PROBE + "</head>"), encoding="utf-8")
    dom = _browse(folder, [f"--window-size={width},900", "--virtual-time-budget=4000", *options, "--dump-dom", file.as_uri()])
    (found,) = re.findall(r"<title>PROBE(.*?)END</title>", dom)
    return json.loads(html.unescape(found))


def test_no_plain_praise_stands_above_a_warning(run):
    summary = copy.deepcopy(run.summary())
    assert summary["cautions"] and summary["warnings"] == summary["cautions"]  # nothing but what is always said
    assert verdict(summary)[:2] == ("good", "Sound") and "To be said with every such fit" in page_text(summary, "", {})
    summary["warnings"].insert(0, "χ²/dof is low: the errors look too large.")
    assert verdict(summary)[:2] == ("mind", "Computed soundly, but a warning says what to mind")
    shown = page_text(summary, "", {})
    assert "Sound." not in shown
    assert shown.index("A warning") < shown.index("the errors look too large") < shown.index("To be said with every such fit")
    folded = fit_html(summary)
    assert "Warnings (1)" in folded and f"Cautions ({len(summary['cautions'])})" in folded
