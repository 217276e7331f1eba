"""The report pages in headless Chromium: they load without errors, ask the network for nothing, the switch works by click and
by keyboard's click, and nothing overflows at 400 and 1600 pixels, light and dark."""
import json
import os
import re
import shutil
import subprocess
import tempfile

import numpy as np
import tifffile
from common import conclude, path, regauge, true

CHROMIUM = next((p for p in map(shutil.which, ("chromium", "chromium-browser", "google-chrome")) if p), None)
true("Chromium is installed (Debian: apt-get install chromium)", CHROMIUM is not None)
if CHROMIUM is None:
    conclude()

# What the page must do, written into the document so that the dumped page tells.
WATCH = """<script>
window.seen = [];
addEventListener("error", (e) => seen.push(String(e.message || e.target.src || e.type)), true);
addEventListener("securitypolicyviolation", (e) => seen.push("asked for " + e.blockedURI));
console.error = console.warn = (...a) => seen.push(a.join(" "));
</script>"""
TRY = """<script>
addEventListener("load", () => {
  const out = { errors: seen, wide: document.documentElement.scrollWidth - innerWidth, flicks: [], width: innerWidth };
  const shownOf = (f) => [...f.querySelectorAll(".stack img")].filter((i) => getComputedStyle(i).visibility !== "hidden").pop().className;
  for (const f of document.querySelectorAll(".flick")) {
    const b = f.querySelector("button.turn"), r = { before: shownOf(f) };
    b.focus();
    r.focused = document.activeElement === b;
    b.click(); r.after = shownOf(f); r.says = f.querySelector(".shown").textContent; r.pressed = b.getAttribute("aria-pressed");
    b.click(); r.back = shownOf(f);
    r.loaded = [...f.querySelectorAll("img")].every((i) => i.complete && i.naturalWidth > 0 && i.alt.length > 3);
    out.flicks.push(r);
  }
  const colour = () => getComputedStyle(document.body).backgroundColor, first = colour();
  document.querySelector("button.theme").click();
  out.themes = first !== colour();
  out.ground = first;
  document.title = "RESULT" + JSON.stringify(out);
});
</script>"""


def load(page, width, dark):
    with open(page, encoding="utf-8") as f:
        html = f.read()
    policy = "<meta http-equiv=\"Content-Security-Policy\" content=\"default-src 'none'; img-src data:; style-src 'unsafe-inline'; script-src 'unsafe-inline'\">"
    html = html.replace("<head>", "<head>" + policy + WATCH, 1).replace("</body>", TRY + "</body>", 1)
    tried = path("tried.html")
    with open(tried, "w", encoding="utf-8") as f:
        f.write(html)
    with tempfile.TemporaryDirectory() as profile:
        done = subprocess.run([
            CHROMIUM, "--headless", "--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run",
            "--disable-background-networking", "--disable-component-update", "--disable-sync", "--hide-scrollbars",
            f"--user-data-dir={profile}", f"--window-size={width},900", f"--blink-settings=preferredColorScheme={0 if dark else 1}",
            "--virtual-time-budget=3000", "--dump-dom", "file://" + os.path.abspath(tried),
        ], capture_output=True, text=True, timeout=120, check=False)
    found = re.search(r"<title>RESULT(.*?)</title>", done.stdout, re.S)
    if not found:
        return {"errors": ["no result: " + done.stderr[-500:]], "flicks": [], "wide": 1, "themes": False, "ground": ""}
    return json.loads(found.group(1).replace("&lt;", "<").replace("&gt;", ">").replace("&amp;", "&"))


def judge(name, page, flicks):
    with open(page, encoding="utf-8") as f:
        html = f.read()
    true(f"{name}: self-contained", not re.search(r"https?://|url\(|src=\"(?!data:)|href=\"(?!data:)", html))
    true(f"{name}: tells its limits", "Not a certified instrument" in html)
    grounds = set()
    for width in (400, 1600):
        for dark in (False, True):
            got = load(page, width, dark)
            what = f"{name} at {width}, {'dark' if dark else 'light'}"
            true(f"{what}: no errors {got['errors']}", not got["errors"])
            true(f"{what}: nothing overflows ({got['wide']})", got["wide"] <= 0)
            true(f"{what}: {flicks} switches", len(got["flicks"]) == flicks)
            for f in got["flicks"]:
                turned = f["before"] == "first" and f["after"] == "second" and f["back"] == "first"
                true(f"{what}: the switch turns {f}", turned and f["focused"] and f["loaded"])
                true(f"{what}: and says so", f["says"] == "After" and f["pressed"] == "true")
            true(f"{what}: the other colours", got["themes"])
            grounds.add((dark, got["ground"]))
    true(f"{name}: light and dark differ", len({g for d, g in grounds if d} & {g for d, g in grounds if not d}) == 0)


rng = np.random.default_rng(1)
y, x = np.mgrid[:150, :170]
a = (500 + 90 * np.sin(x / 9) * np.cos(y / 13) + 40 * np.sin((x + 2 * y) / 5) + rng.normal(0, 2, y.shape)).astype("f4")
a[40:50, 60:80] = np.nan
odd = path("<b>&'\".npy")
np.save(odd, a)
page = path("page.html")
common = ("--overwrite", "--quiet", "--report", page)
regauge("rescale", odd, path("half.tif"), "--factor", "0.5", *common)
judge("rescale", page, 1)
with open(page, encoding="utf-8") as f:
    true("names are escaped", "<b>&'" not in f.read())
regauge("move", odd, path("turned.tif"), "--turn", "21", "--frame", "fit", "--values", "total", "--sigma", "2", *common)
judge("turned totals", page, 1)
np.save(path("one.npy"), a)
np.save(path("two.npy"), a + rng.normal(0, 2, a.shape).astype("f4"))
regauge("unify", path("one.npy"), path("two.npy"), "--onto", path("one.npy"), "--out", path("both"), *common)
judge("unify", page, 2)
blocks = np.repeat(np.repeat(rng.choice([3, 17, 200], (12, 14)), 13, 0), 12, 1).astype("u1")
np.save(path("classes.npy"), blocks)
regauge("rescale", path("classes.npy"), path("fewer.npy"), "--factor", "0.4", "--values", "label", *common)
judge("classes", page, 1)
with open(page, encoding="utf-8") as f:
    text = f.read()
true("classes are named, and nothing else is", all(f"</i>{c}</span>" in text for c in (3, 17, 200)) and text.count("</i>") == 3)
true("classes have no difference", "Output less input" not in text)
tifffile.imwrite(path("bands.tif"), np.stack([a, 2 * a, a[::-1]]), photometric="minisblack", planarconfig="separate")
regauge("move", path("bands.tif"), path("bands-out.tif"), "--shift", "0.4,0.2", *common)
judge("bands", page, 3)
regauge("audit", odd, path("half.tif"), *common)
judge("audit", page, 1)
regauge("subtract", path("one.npy"), path("two.npy"), path("d.tif"), "--sigma", "2", *common)
judge("subtract", page, 0)
conclude()
