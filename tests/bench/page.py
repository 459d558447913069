"""Speed and weight of the page in headless Chromium, medians over loopback."""

import shutil
import statistics
from typing import Any

from pinlight.catalogue.store import Catalogue
from pinlight.faces.http import create_app
from tests.served import serving

FIRST = "/?target=upsilon+And&array=north&mode=H"
CHANGE = """async (name) => {
    const begun = performance.now();
    document.getElementById("target").value = name;
    document.getElementById("ask").requestSubmit();
    while (asking && performance.now() < begun + 10_000) await new Promise(requestAnimationFrame);
    await new Promise(requestAnimationFrame);
    if (answer.dataset.state !== "ranking") throw new Error(`${name}: ${answer.dataset.state}`);
    return performance.now() - begun;
}"""
TARGETS = ("tau And", "HD 10307", "omega And", "HD 3651", "eta Cas", "mu And", "tau And")


def measure_page(catalogue: Catalogue) -> None:
    """Print how long a cold page and a changed target take, and what a first visit weighs."""
    program = shutil.which("chromium") or shutil.which("chromium-browser")
    if program is None:
        print("the page: not measured, there is no Chromium")
        return
    from playwright.sync_api import sync_playwright

    with serving(create_app(catalogue)) as address, sync_playwright() as playwright:
        browser = playwright.chromium.launch(executable_path=program, args=["--no-sandbox"])
        listed, drawn, weights = [], [], []
        for _ in range(7):
            context = browser.new_context()  # nothing kept from before
            page = context.new_page()
            session = context.new_cdp_session(page)
            session.send("Network.enable")
            sizes: list[float] = []
            session.on("Network.loadingFinished", lambda event, to=sizes: to.append(event["encodedDataLength"]))
            page.goto(address + FIRST, wait_until="commit")
            page.wait_for_selector("html[data-drawn]")
            paint = page.evaluate("performance.getEntriesByName('first-contentful-paint')[0].startTime")
            listed.append(paint)
            drawn.append(page.evaluate("performance.now()"))
            page.wait_for_load_state("networkidle")
            weights.append(sum(sizes))
            context.close()
        changes: dict[str, list[float]] = {}
        for night in ("", "&night=2026-12-01"):
            page = browser.new_page()
            page.goto(address + FIRST + night)
            page.wait_for_selector("html[data-drawn]")
            changes[night] = [page.evaluate(CHANGE, name) for name in TARGETS]
            page.close()
        page = browser.new_page()
        anew = [_load_ms(page, address, name) for name in TARGETS]
        browser.close()
    median = statistics.median
    print(f"{'page, cold: ranking to be read':<44}{median(listed):9.1f} ms")
    print(f"{'page, cold: charts drawn':<44}{median(drawn):9.1f} ms")
    print(
        f"{'page, changed target':<44}{median(changes['']):9.1f} ms   loading it anew: {median(anew):9.1f} ms"
    )
    print(f"{'page, changed target, with a night':<44}{median(changes['&night=2026-12-01']):9.1f} ms")
    print(f"{'page, a first visit weighs, compressed':<44}{median(weights) / 1000:9.1f} kB")


def _load_ms(page: Any, address: str, name: str) -> float:
    page.goto(f"{address}/?target={name.replace(' ', '+')}&array=north&mode=H")
    page.wait_for_selector("html[data-drawn]")
    return float(page.evaluate("performance.now()"))
