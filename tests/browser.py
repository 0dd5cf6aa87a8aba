"""A headless browser for tests of pages: runs a script in a page and returns what it found."""

import html
import json
import re
import shutil
import subprocess
import tempfile

CHROMIUM = shutil.which("chromium") or shutil.which("chromium-browser")
_FLAGS = ("--headless", "--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run",
          "--disable-background-networking", "--disable-component-update", "--disable-sync",
          "--enable-logging=stderr", "--v=0", "--dump-dom")
_WATCH = """<script>
window.found = { errors: [] };
window.alert = () => found.errors.push("alert");
window.addEventListener("error", (e) => found.errors.push(e.message));
window.addEventListener("unhandledrejection", (e) => found.errors.push(String(e.reason)));
document.addEventListener("securitypolicyviolation", (e) => found.errors.push(e.blockedURI));
</script>"""
_REPORT = """<script>
(async () => {
  const $ = (id) => document.getElementById(id), all = (q) => [...document.querySelectorAll(q)];
  const pause = (ms) => new Promise((done) => setTimeout(done, ms));
  const press = (node, key) => node.dispatchEvent(new KeyboardEvent("keydown",
    { key, bubbles: true, cancelable: true }));
  try { %s } catch (error) { found.errors.push(String(error.stack)); }
  const said = document.createElement("pre");
  said.id = "found-by-the-test";
  said.textContent = JSON.stringify(found);
  document.body.append(said);
})();
</script>"""


def instrumented(page, script):
    """Return a page with a script at its end that fills ``found``."""
    page = page.replace("<style>", _WATCH + "<style>", 1)
    before, end, after = page.rpartition("</body>")
    return before + _REPORT % script + end + after


def browse(address, *, width=1200, height=900, real_time=False):
    """Open an instrumented page and return what its script found, console errors included.

    In real time the script may not wait for anything: the page is taken once it has loaded.
    """
    with tempfile.TemporaryDirectory(ignore_cleanup_errors=True) as profile:
        words = [CHROMIUM, *_FLAGS, f"--user-data-dir={profile}", f"--window-size={width},{height}",
                 *([] if real_time else ["--virtual-time-budget=20000"]), address]
        done = subprocess.run(words, capture_output=True, timeout=180, check=True)
    dom = done.stdout.decode("utf-8")
    said = re.search(r'<pre id="found-by-the-test">(.*?)</pre>', dom, re.DOTALL)
    assert said, "the script in the page did not come to its end"
    found = json.loads(html.unescape(said.group(1)))
    found["errors"] += [line for line in done.stderr.decode("utf-8", "replace").splitlines()
                        if "CONSOLE" in line]
    return found
