"""Sites and their cutoffs by keyboard: set in place, taken away, pasted, from a file; every change saved and undone."""

from __future__ import annotations

from pathlib import Path

from bench_study import bench, press, settled, shown, type_text
from test_screens_compare import make
from textual import events
from textual.pilot import Pilot

from study.document import load_study
from tui.screens.sites_page import SitesPage


async def open_page(pilot: Pilot[int]) -> SitesPage:
    await settled(pilot)
    await press(pilot, "2", "e")
    page = pilot.app.screen
    assert isinstance(page, SitesPage)
    await page.settle()
    await settled(pilot)
    return page


async def test_sites_are_set_in_place_and_taken_away(tmp_path: Path) -> None:
    path = make(tmp_path)
    app = bench(path)
    async with app.run_test(size=(100, 24)) as pilot:
        await open_page(pilot)
        text = shown(pilot)
        assert "4 of 4 sites have a cutoff." in text and "Birch [red]" in text
        await press(pilot, "j", "enter")
        await type_text(pilot, "x4")
        assert "“x4” is not a number" in shown(pilot)
        await type_text(pilot, "46,5")
        assert load_study(path).assignment.sites["Birch [red]"] == 46.5
        assert "46.5" in shown(pilot)
        await press(pilot, "x")
        assert "Birch [red]" not in load_study(path).assignment.sites
        assert "left out: no cutoff" in shown(pilot) and "3 of 4 sites have a cutoff; 400 rows" in shown(
            pilot
        )
        await press(pilot, "u")
        assert load_study(path).assignment.sites["Birch [red]"] == 46.5
        await press(pilot, "escape")
        assert not isinstance(app.screen, SitesPage)


async def test_cutoffs_are_pasted_or_read_from_a_second_file(tmp_path: Path) -> None:
    path = make(tmp_path)
    (tmp_path / "lines.csv").write_text("bay,cutoff\nDot,51\nash,41\n")
    app = bench(path)
    async with app.run_test(size=(100, 24)) as pilot:
        page = await open_page(pilot)
        page.post_message(events.Paste("Ash\t42\nCedar\t56.5\n"))
        await settled(pilot)
        sites = load_study(path).assignment.sites
        assert (sites["Ash"], sites["Cedar"], sites["Dot"]) == (42.0, 56.5, 50.0)
        assert "2 cutoffs set" in shown(pilot)
        page.post_message(events.Paste("Elsewhere\t42\n"))
        await settled(pilot)
        assert 'Line 1 names "Elsewhere"' in shown(pilot)
        await press(pilot, "f")
        await type_text(pilot, "lines.csv")
        sites = load_study(path).assignment.sites
        assert (sites["Ash"], sites["Dot"]) == (41.0, 51.0)


async def test_a_study_with_one_line_becomes_one_with_sites(tmp_path: Path) -> None:
    path = make(tmp_path)
    text = path.read_text().partition("[assignment]")[0]
    path.write_text(text + '[assignment]\nrule = "cutoff"\ntreated = "at or above"\ncutoff = 50.0\n')
    app = bench(path)
    async with app.run_test(size=(100, 24)) as pilot:
        await open_page(pilot)
        await press(pilot, "enter")
        await type_text(pilot, "40")
        study = load_study(path)
        assert study.assignment.rule == "cutoffs" and study.assignment.sites == {"Ash": 40.0}
        assert study.assignment.cutoff is None
