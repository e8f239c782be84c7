"""Opens one of our HTML reports in headless Chromium by WebDriver and says what it found, as JSON.

usage: page_check.py PAGE.html [--trial SETTINGS.json] [--shots DIR]

SETTINGS.json holds a list of settings for "try a setting"; the page's own eye heights come back.
"""
import argparse
import base64
import json
import pathlib
import socket
import subprocess
import sys
import tempfile
import time
import urllib.request


def free_port():
    with socket.socket() as s:
        s.bind(("127.0.0.1", 0))
        return s.getsockname()[1]


class Browser:
    """The few WebDriver commands (W3C recommendation) that are needed here."""

    def __init__(self, dark=False, width=1200, height=900):
        self.port = free_port()
        self.profile = tempfile.TemporaryDirectory()
        self.driver = subprocess.Popen(["chromedriver", f"--port={self.port}"],
                                       stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)
        for _ in range(200):
            try:
                urllib.request.urlopen(f"http://127.0.0.1:{self.port}/status", timeout=5).read()
                break
            except OSError:
                time.sleep(0.05)
        args = ["--headless", "--no-sandbox", "--disable-gpu", "--hide-scrollbars",
                f"--user-data-dir={self.profile.name}", f"--window-size={width},{height}"]
        if dark:
            args.append("--force-dark-mode")
        caps = {"capabilities": {"alwaysMatch": {
            "browserName": "chrome", "goog:chromeOptions": {"args": args},
            "goog:loggingPrefs": {"browser": "ALL", "performance": "ALL"}}}}
        self.base = ""
        self.base = "/session/" + self.call("POST", "/session", caps)["sessionId"]

    def call(self, method, path, body=None):
        data = None if body is None else json.dumps(body).encode()
        request = urllib.request.Request(f"http://127.0.0.1:{self.port}{self.base}{path}", data, method=method,
                                         headers={"Content-Type": "application/json"})
        try:
            with urllib.request.urlopen(request, timeout=120) as reply:
                return json.load(reply)["value"]
        except urllib.error.HTTPError as problem:
            raise RuntimeError(problem.read().decode()) from None

    def open(self, url):
        self.call("POST", "/url", {"url": url})

    def run(self, script, *arguments):
        return self.call("POST", "/execute/sync", {"script": script, "args": list(arguments)})

    def devtools(self, command, parameters):
        return self.call("POST", "/goog/cdp/execute", {"cmd": command, "params": parameters})

    def log(self, kind):
        return self.call("POST", "/se/log", {"type": kind})

    def close(self):
        try:
            self.call("DELETE", "")
        finally:
            self.driver.terminate()
            self.driver.wait()
            self.profile.cleanup()


CHARTS = """
return pageData.figures.map((figure) => {
  const chart = charts.get(figure.id);
  if (!chart) return [figure.id, 0, 0];
  const points = chart.data.datasets.reduce((n, set) => n + set.data.length, 0);
  const pixels = chart.ctx.getImageData(0, 0, chart.canvas.width, chart.canvas.height).data;
  let inked = 0;
  for (let i = 3; i < pixels.length; i += 4) if (pixels[i]) ++inked;
  return [figure.id, points, inked];
});
"""

# Contrast by the Web Content Accessibility Guidelines 2.1: relative luminance of text and of the
# nearest ground that is not transparent.
CONTRAST = """
const luminance = (rgb) => {
  const [r, g, b] = rgb.map((v) => { v /= 255; return v <= 0.03928 ? v / 12.92 : ((v + 0.055) / 1.055) ** 2.4; });
  return 0.2126 * r + 0.7152 * g + 0.0722 * b;
};
const parse = (text) => (text.match(/[\\d.]+/g) || []).map(Number);
let least = 99, where = "";
for (const element of document.querySelectorAll("body *")) {
  const own = [...element.childNodes].some((n) => n.nodeType === 3 && n.textContent.trim());
  if (!own || ["SCRIPT", "STYLE"].includes(element.tagName)) continue;
  let ground = element, back = [0, 0, 0, 0];
  while (ground) {
    back = parse(getComputedStyle(ground).backgroundColor);
    if (back.length === 3 || back[3] > 0) break;
    ground = ground.parentElement;
  }
  const ink = parse(getComputedStyle(element).color).slice(0, 3);
  const a = luminance(ink), b = luminance(ground ? back.slice(0, 3) : [255, 255, 255]);
  const ratio = (Math.max(a, b) + 0.05) / (Math.min(a, b) + 0.05);
  if (ratio < least) { least = ratio; where = element.tagName + ": " + element.textContent.trim().slice(0, 40); }
}
return [least, where];
"""


def main():
    options = argparse.ArgumentParser()
    options.add_argument("page")
    options.add_argument("--trial")
    options.add_argument("--shots")
    given = options.parse_args()
    url = pathlib.Path(given.page).resolve().as_uri()
    found = {}

    browser = Browser()
    try:
        browser.open("about:blank")
        browser.log("performance")  # what the browser's own first page asked for
        browser.open(url)
        found["charts"] = browser.run(CHARTS)
        found["contrast_light"] = browser.run(CONTRAST)
        found["title"] = browser.run("return document.querySelector('h1').textContent")
        found["injected"] = browser.run("return window.injected === undefined ? 0 : 1")
        found["unlabelled"] = browser.run(
            "return [...document.querySelectorAll('input, select')].filter((e) => !e.labels.length && !e.closest('label'))"
            ".map((e) => e.id)")
        found["overflow"] = browser.run(
            "return document.documentElement.scrollWidth - document.documentElement.clientWidth")
        if given.trial:
            with open(given.trial) as file:
                settings = json.load(file)
            found["trial_heights_v"] = browser.run(
                "return arguments[0].map((s) => tapwrightTrial.evaluate(s).height_v)", settings)
            found["answer_height_v"] = browser.run(
                "return tapwrightTrial.evaluate({...tapwrightTrial.answer, dfe_on: true}).height_v")
            # The controls themselves: move the first FIR slider, look at the number shown.
            found["moved"] = browser.run("""
              const slider = document.querySelector("input[type=range][id^=trial-fir]");
              if (!slider) return null;
              const before = document.getElementById("trial-height").textContent;
              slider.value = Number(slider.value) > 0 ? Number(slider.min) : Number(slider.max);
              slider.dispatchEvent(new Event("input"));
              const after = document.getElementById("trial-height").textContent;
              document.getElementById("trial-reset").click();
              return [before, after, document.getElementById("trial-height").textContent];""")
        pdf = browser.call("POST", "/print", {"background": True})
        found["pdf_bytes"] = len(base64.b64decode(pdf))
        found["pdf_head"] = base64.b64decode(pdf)[:5].decode("latin-1")
        found["console"] = [e["message"] for e in browser.log("browser") if e["level"] in ("SEVERE", "WARNING")]
        requests = []
        for entry in browser.log("performance"):
            message = json.loads(entry["message"])["message"]
            if message["method"] == "Network.requestWillBeSent":
                target = message["params"]["request"]["url"]
                if target != url and not target.startswith("data:"):
                    requests.append(target)
        found["requests"] = requests
        for name, width, height, dark in [("desktop-light", 1200, 900, False), ("phone-light", 390, 844, False),
                                          ("desktop-dark", 1200, 900, True), ("phone-dark", 390, 844, True)]:
            browser.devtools("Emulation.setDeviceMetricsOverride",
                             {"width": width, "height": height, "deviceScaleFactor": 1, "mobile": width < 500})
            browser.devtools("Emulation.setEmulatedMedia",
                             {"features": [{"name": "prefers-color-scheme", "value": "dark" if dark else "light"}]})
            browser.open(url)
            if dark:
                found["contrast_dark"] = browser.run(CONTRAST)
            found["overflow_" + name] = browser.run(
                "return document.documentElement.scrollWidth - document.documentElement.clientWidth")
            if given.shots:
                size = browser.run("return document.documentElement.scrollHeight")
                shot = browser.devtools("Page.captureScreenshot", {
                    "captureBeyondViewport": True,
                    "clip": {"x": 0, "y": 0, "width": width, "height": min(size, 9000), "scale": 1}})
                pathlib.Path(given.shots, name + ".png").write_bytes(base64.b64decode(shot["data"]))
    finally:
        browser.close()
    json.dump(found, sys.stdout)


main()
