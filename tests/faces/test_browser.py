"""The page in a real browser: Debian's Chromium, driven by Playwright, against the served application."""

import os
import time
from pathlib import Path

import pytest

import pinlight as pl
from pinlight.catalogue.members import add_member
from pinlight.faces.http import create_app
from tests.served import serving

# Where screenshots are kept, if anywhere.
SCREENSHOTS = "PINLIGHT_TEST_SCREENSHOTS"

NIGHT = "target=upsilon+And&array=north&mode=H&night=2026-12-01"
PLAN = "targets=upsilon+And%0AHD+3651%0A61.9+-67.3&array=north&mode=H&night=2026-12-01"
PHONE = {"width": 390, "height": 844}
DESKTOP = {"width": 1440, "height": 900}


class Visit:
    """One reader's window, and everything that went wrong in it."""

    def __init__(self, browser, served, **options):
        self.served, self.troubles, self.asked = served, [], []
        self.context = browser.new_context(**{"viewport": DESKTOP, "color_scheme": "light"} | options)
        self.context.set_default_timeout(8000)
        self.page = self.context.new_page()
        self.page.on("request", lambda request: self.asked.append(request.url))
        self.page.on("pageerror", lambda error: self.troubles.append(str(error)))
        self.page.on(
            "console", lambda line: line.type in ("error", "warning") and self.troubles.append(line.text)
        )

    def open(self, address):
        self.page.goto(self.served + address)
        if self.page.locator("#plot-sky").count():
            self.page.wait_for_selector("html[data-drawn]")
        return self.page

    def listed(self):
        return [int(row.get_attribute("data-star")) for row in self.page.locator(".ranked tr[data-star]").all()]


@pytest.fixture
def visit(browser, served):
    opened = []

    def new(**options):
        opened.append(Visit(browser, served, **options))
        return opened[-1]

    yield new
    for one in opened:
        one.context.close()


@pytest.fixture
def no_trouble(visit):
    """A window in which nothing may go wrong and no request may leave the server."""
    one = visit()
    yield one
    assert one.troubles == []
    assert all(url.startswith(one.served) for url in one.asked), one.asked


def target(page):
    return page.get_by_role("combobox", name="Target", exact=True)


def ids(catalogue, name, **options):
    return [star.star_id for star in pl.rank(catalogue, name, array="north", mode="H", **options).calibrators]


def test_the_main_path_by_mouse(no_trouble, catalogue):
    page = no_trouble.open("/")
    target(page).click()
    page.keyboard.type("upsilon a", delay=15)
    page.get_by_role("option", name="upsilon And").click()
    page.wait_for_selector(".ranked")
    assert no_trouble.listed() == ids(catalogue, "upsilon And")
    assert "target=upsilon+And" in page.url
    assert page.title() == "upsilon And · Pinlight"

    page.get_by_label("Night of").fill("2026-12-01")
    page.wait_for_selector("#answer.has-night:not(.busy)")
    assert no_trouble.listed() == ids(catalogue, "upsilon And", night="2026-12-01")
    page.get_by_label("Ash").uncheck()
    page.wait_for_url("**stations=Birch*")
    page.wait_for_selector("#answer:not(.busy)")
    without_ash = ids(catalogue, "upsilon And", night="2026-12-01", stations="Birch,Cedar,Hazel,Rowan,Willow")
    assert no_trouble.listed() == without_ash

    page.reload()  # the address holds the whole state
    assert no_trouble.listed() == without_ash
    assert not page.get_by_label("Ash").is_checked()
    page.go_back()
    page.wait_for_selector("#answer:not(.busy)")
    assert page.get_by_label("Ash").is_checked()
    assert no_trouble.listed() == ids(catalogue, "upsilon And", night="2026-12-01")

    page.get_by_text("Left out:").click()
    page.get_by_text("fainter than the limit").click()
    assert page.locator(".reason[open] .names a").count() == 40
    page.locator(".ranked tr[data-star] a").first.click()
    page.wait_for_url("**/star/*")
    assert page.get_by_role("heading", name="How its diameter came about").is_visible()


def test_the_main_path_by_keyboard(no_trouble, catalogue):
    page = no_trouble.open("/")
    press = page.keyboard.press
    press("Tab")
    assert page.evaluate("document.activeElement.className") == "skip"
    while page.evaluate("document.activeElement.id") != "target":
        press("Tab")
    page.keyboard.type("tau c", delay=15)
    page.wait_for_selector("#suggestions:not([hidden])")
    for _ in range(9):
        press("ArrowDown")
        marked = target(page).get_attribute("aria-activedescendant")
        if page.locator(f"#{marked} b").text_content() == "tau Cet":
            break
    press("Enter")
    page.wait_for_selector(".ranked")
    assert no_trouble.listed() == ids(catalogue, "tau Cet")
    while not page.evaluate("document.activeElement.closest('tr[data-star]')"):
        press("Tab")
    press("ArrowDown")
    assert page.locator("tr.pointed").get_attribute("data-star") == str(no_trouble.listed()[1])
    assert "% ·" in page.locator("#readout").text_content()
    press("Escape")
    assert page.locator("tr.pointed").count() == 0


def test_pointing_at_a_star_in_one_lights_it_up_in_all(no_trouble):
    page = no_trouble.open(f"/?{NIGHT}")
    listed = no_trouble.listed()
    page.locator(f'tr[data-star="{listed[4]}"]').hover()
    shown = page.evaluate(
        """() => ({
            sky: source("sky", "pointed_sky").data.name,
            v2: source("visibility", "pointed_visibility").data.x.length,
            night: source("night", "pointed_night").data.row,
        })"""
    )
    name = page.locator(f'tr[data-star="{listed[4]}"] a').text_content()
    assert shown["sky"] == [name]
    assert shown["v2"] == 1
    assert set(shown["night"]) == {5}
    assert name in page.locator("#readout").text_content()

    # From each plot back to the list: where the star of that rank is drawn, in pixels of the window.
    for plot, rank in (("sky", 7), ("visibility", 0), ("night", 3)):
        figure = page.locator(f"#plot-{plot}")
        figure.scroll_into_view_if_needed()
        box = figure.bounding_box()
        x, y = page.evaluate(
            """([plot, i]) => {
                const figure = figures[plot].get_model_by_name(plot);
                const frame = Bokeh.index.find_one_by_id?.(figure.id) ?? Bokeh.index.get_by_id(figure.id);
                const { sources, ranges } = data;
                const place = {
                    sky: [sources.stars.east[i], sources.stars.north[i]],
                    visibility: [ranges.visibility[1] * 47 / 48, sources.curves.v2[i][47]],
                    night: [ranges.night[0] + (ranges.night[1] - ranges.night[0]) / 2, i + 1],
                }[plot];
                const area = frame.frame;
                return [area.x_scale.compute(place[0]), area.y_scale.compute(place[1])];
            }""",
            [plot, rank],
        )
        page.mouse.move(box["x"] + x, box["y"] + y)
        page.wait_for_selector("tr.pointed")
        page.wait_for_timeout(60)
        assert page.locator("tr.pointed").get_attribute("data-star") == str(listed[rank]), plot


def test_bad_input_is_told_and_can_be_mended(visit, catalogue):
    one = visit()
    page = one.open("/?target=tau+Cet&array=north&mode=H")
    target(page).fill("tau Ceet")
    page.keyboard.press("Enter")
    alert = page.get_by_role("alert")
    assert "did you mean tau Cet" in alert.text_content()
    assert page.locator(".ranked").count() == 0
    target(page).fill("tau Cet")
    page.get_by_role("button", name="Rank", exact=True).click()
    page.wait_for_selector(".ranked")
    assert page.get_by_role("alert").count() == 0
    assert one.listed() == ids(catalogue, "tau Cet")


def test_an_empty_result_says_why(no_trouble):
    page = no_trouble.open("/?target=tau+Cet&array=north&mode=H&separation_max_deg=0.01")
    assert "No star passes every gate" in page.locator("#answer").text_content()
    assert page.get_by_text("farther from the target than the limit").is_visible()
    assert not page.locator("#plot-sky").is_visible()


def test_an_error_of_the_servers_own_is_told_and_can_be_asked_again(visit, catalogue, monkeypatch):
    one = visit()
    page = one.open("/")

    def broken(_question):
        raise RuntimeError("a defect made for this test")

    monkeypatch.setattr("pinlight.faces.page.answer_ranking", broken)
    target(page).fill("tau Cet")
    page.keyboard.press("Enter")
    assert "The server gave no answer" in page.get_by_role("alert").text_content()
    monkeypatch.undo()
    page.get_by_role("button", name="Ask again").click()
    page.wait_for_selector(".ranked")
    assert one.listed() == ids(catalogue, "tau Cet")


def test_a_slow_server_shows_progress_and_a_newer_question_wins(no_trouble, catalogue, monkeypatch):
    from pinlight.faces import page as page_module

    answer = page_module.answer_ranking

    def slow(question):
        if question.target == "tau Cet":
            time.sleep(1.0)
        return answer(question)

    monkeypatch.setattr(page_module, "answer_ranking", slow)
    page = no_trouble.open("/")
    target(page).fill("tau Cet")
    page.keyboard.press("Enter")
    page.wait_for_selector(".progress.busy")
    assert page.locator(".progress").text_content() == "Ranking"
    target(page).fill("upsilon And")
    page.keyboard.press("Enter")
    page.wait_for_selector(".ranked")
    assert no_trouble.listed() == ids(catalogue, "upsilon And")
    page.wait_for_timeout(1100)  # the slow answer has come by now, and is not shown
    assert no_trouble.listed() == ids(catalogue, "upsilon And")
    assert page.locator(".progress.busy").count() == 0


def test_the_array_changes_its_stations_and_modes(no_trouble):
    page = no_trouble.open("/?target=tau+Cet&array=north&mode=K&stations=Ash,Rowan")
    page.get_by_label("Array").select_option("south")
    page.wait_for_url("**array=south*")
    page.wait_for_selector("#answer:not(.busy)")
    assert page.get_by_label("Ash").count() == 0
    assert "stations" not in page.url


def test_copying_gives_the_query(visit):
    one = visit(permissions=["clipboard-read", "clipboard-write"])
    page = one.open("/?target=tau+Cet&array=north&mode=H&v2_min=0.9")
    page.get_by_text("The same question").click()
    page.get_by_role("button", name="Copy Command").click()
    page.wait_for_timeout(100)
    copied = page.evaluate("navigator.clipboard.readText()")
    assert copied == "pinlight rank 'tau Cet' --array north --mode H --v2-min 0.9"


def test_dark_plots_follow_the_switch_and_are_remembered(no_trouble):
    page = no_trouble.open(f"/?{NIGHT}")
    paper = page.evaluate("getComputedStyle(document.body).backgroundColor")
    page.get_by_role("button", name="Dark").click()
    page.wait_for_selector("html[data-drawn=dark]")
    assert page.evaluate("getComputedStyle(document.body).backgroundColor") != paper
    assert page.evaluate("source('sky', 'stars').data.star_id.length") == 20
    page.reload()
    page.wait_for_selector("html[data-drawn=dark]")


def test_a_night_is_planned_on_the_page(no_trouble):
    page = no_trouble.open("/plan")
    page.get_by_label("Targets").fill("upsilon And\nHD 3651\n61.9 -67.3")
    page.get_by_label("Night of").fill("2026-12-01")
    page.get_by_role("button", name="Plan").click()
    page.wait_for_url("**/plan?targets=*")
    assert page.locator(".blocks > li").count() == 2
    assert page.get_by_text("it never rises above 30 deg").is_visible()
    with page.expect_download() as download:
        page.get_by_role("link", name="CSV").click()
    assert Path(download.value.path()).read_text(encoding="utf-8").startswith("block,target,role")


def test_it_prints_without_its_controls(no_trouble, tmp_path):
    page = no_trouble.open(f"/?{NIGHT}")
    page.emulate_media(media="print")
    assert not page.get_by_role("button", name="Rank").is_visible()
    assert page.locator(".ranked").is_visible()
    assert page.locator("#plot-sky").is_visible()
    page.pdf(path=tmp_path / "night.pdf")
    assert (tmp_path / "night.pdf").stat().st_size > 20_000


VIEWS = {
    "first": "/",
    "ranking": f"/?{NIGHT}",
    "without-night": "/?target=tau+Cet&array=south&mode=H",
    "empty": "/?target=tau+Cet&array=north&mode=H&separation_max_deg=0.01",
    "problem": "/?target=tau+Ceet&array=north&mode=H",
    "star": "/star/1200",
    "night": f"/plan?{PLAN}",
    "http": "/api",
    "unknown": "/no/such/page",
}


@pytest.mark.parametrize(
    ("scheme", "size", "audit"),
    [
        ("light", "desktop", True),
        ("dark", "phone", True),
        ("dark", "desktop", False),
        ("light", "phone", False),
    ],
)
def test_no_view_has_a_barrier_or_overflows(visit, scheme, size, audit):
    """axe-core's rules of WCAG A and AA and its best practices on every view, each scheme and size once."""
    folder = os.environ.get(SCREENSHOTS)
    if not audit and not folder:
        return  # the other two combinations are for their screenshots
    viewport = DESKTOP if size == "desktop" else PHONE
    one = visit(color_scheme=scheme, viewport=viewport)
    for name, address in VIEWS.items():
        page = one.open(address)
        if folder:
            Path(folder).mkdir(parents=True, exist_ok=True)
            page.screenshot(path=Path(folder) / f"{name}-{size}-{scheme}.png", full_page=True)
        assert page.evaluate("document.documentElement.scrollWidth") <= viewport["width"], name
        if audit:
            page.evaluate("document.querySelectorAll('details').forEach((one) => { one.open = true; })")
            assert barriers(page) == [], f"{name}, {size}, {scheme}"


def barriers(page):
    from axe_playwright_python.sync_playwright import Axe

    return [
        (rule["id"], node["html"][:200], node["failureSummary"][:200])
        for rule in Axe().run(page).response["violations"]
        for node in rule["nodes"]
        if rule["impact"] in ("serious", "critical")
    ]


def test_the_audit_would_notice_a_barrier(visit):
    page = visit().open("/api")
    page.evaluate("document.querySelector('main').innerHTML += '<img src=\"/static/pinlight.svg\"><input>'")
    assert {rule for rule, _, _ in barriers(page)} >= {"image-alt", "label"}


@pytest.mark.parametrize("seeded_url", ["sqlite"], indirect=True)
def test_a_member_judges_a_star(browser, seeded_url, opened):
    catalogue = opened(seeded_url)
    keeper = catalogue.acting(add_member(catalogue, "Kit", "keeper"))
    editor = add_member(keeper, "Ed", "editor")
    star_id = catalogue.find("HD 10132")
    with serving(create_app(catalogue)) as address:
        one = Visit(browser, address)
        page = one.open(f"/star/{star_id}")
        page.get_by_text("Judge it").click()
        page.get_by_label("Standing").select_option("barred")
        page.get_by_label("Reason").fill("a companion at 20 mas")
        page.get_by_label("Your token").fill("no such token")
        page.get_by_role("button", name="Record it").click()
        page.get_by_text("Not recorded:").wait_for()
        page.get_by_label("Your token").fill(editor)
        page.get_by_role("button", name="Record it").click()
        page.get_by_text("barred by the team").wait_for()
        assert "a companion at 20 mas" in page.locator(".record").text_content()
        page.get_by_text("Judge it").click()
        assert page.get_by_label("Your token").input_value() == editor  # kept while the tab is open
        one.open(f"/?{NIGHT}")
        assert star_id not in one.listed()
        page.get_by_text("Left out:").click()
        page.get_by_text("barred by a member of the team").click()
        assert page.get_by_role("link", name="HD 10132").is_visible()
        one.context.close()
