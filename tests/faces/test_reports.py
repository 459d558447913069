"""Reports are files complete in themselves: read here, and opened in a browser where there is one."""

import re
from pathlib import Path

import pytest
from click.testing import CliRunner

from pinlight.faces.cli import main
from pinlight.resources import seed_folder

NIGHT = ("--array", "north", "--mode", "H", "--night", "2026-12-01")


def run(seeded_path, *arguments):
    return CliRunner().invoke(main, [*arguments, "--db", str(seeded_path)])


@pytest.fixture(scope="module")
def reports(seeded_path, tmp_path_factory):
    folder = tmp_path_factory.mktemp("reports")
    (folder / "targets.csv").write_text("name\nupsilon And\nHD 3651\n", encoding="utf-8")
    asked = {
        "ranking": ("rank", "upsilon And", *NIGHT),
        "many": ("rank", str(seed_folder() / "targets.csv"), "--array", "north", "--mode", "H"),
        "plan": ("plan", str(folder / "targets.csv"), *NIGHT),
        "empty": ("rank", "tau Cet", "--array", "north", "--mode", "H", "--separation-max-deg", "0.01"),
    }
    for name, arguments in asked.items():
        answer = run(seeded_path, *arguments, "--report", str(folder / f"{name}.html"))
        assert answer.exit_code == 0, answer.output
    return folder


def without_scripts(path: Path) -> str:
    return re.sub(r"<script>.*?</script>", "", path.read_text(encoding="utf-8"), flags=re.DOTALL)


@pytest.mark.parametrize("name", ["ranking", "many", "plan", "empty"])
def test_a_report_asks_for_nothing(reports, name):
    text = without_scripts(reports / f"{name}.html")
    assert "own operating limits, Sun avoidance and laser and aircraft rules come first" in text
    for address in re.findall(r'(?:src|href)="([^"]*)"', text):
        assert address.startswith("#"), address
    assert "url(" not in text
    assert "@import" not in text


def test_a_report_has_what_was_printed(reports, seeded_path):
    text = without_scripts(reports / "ranking.html")
    printed = run(seeded_path, "rank", "upsilon And", *NIGHT).output
    for name in re.findall(r"^ *\d+ +(H[DR] \d+)", printed, re.MULTILINE):
        assert name in text
    assert text.count("<tr>") == 21
    assert text.count("<rect") > 60
    many = without_scripts(reports / "many.html")
    assert many.count('<section class="ranking">') == 12
    assert "No star passes every gate." in without_scripts(reports / "empty.html")


def test_a_report_is_not_written_over_its_own_targets(seeded_path, tmp_path):
    targets = tmp_path / "targets.csv"
    targets.write_text("name\ntau Cet\n", encoding="utf-8")
    answer = run(seeded_path, "rank", str(targets), "--array", "north", "--mode", "H", "--report", str(targets))
    assert answer.exit_code == 2
    assert "which is also TARGET" in answer.output
    assert targets.read_text(encoding="utf-8") == "name\ntau Cet\n"


def test_reports_draw_and_print_without_a_network(reports, browser, tmp_path):
    context = browser.new_context(offline=True)
    page = context.new_page()
    asked, troubles = [], []
    page.on("request", lambda request: asked.append(request.url))
    page.on("pageerror", lambda error: troubles.append(str(error)))
    for name in ("ranking", "many", "plan"):
        page.goto((reports / f"{name}.html").as_uri())
        if name != "plan":
            page.wait_for_function("Bokeh.documents.length && Bokeh.documents.every((one) => one.is_idle)")
        page.pdf(path=tmp_path / f"{name}.pdf")
        assert (tmp_path / f"{name}.pdf").stat().st_size > 20_000
    context.close()
    assert troubles == []
    assert all(url.startswith("file:") for url in asked)
