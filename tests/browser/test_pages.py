"""The trade-off page and the build sheet in a real browser: what a user clicks, types and prints."""

import dataclasses
import io
import re
import time
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
from browsing import Opened
from builders import LOOPS, build_problem
from fronts import STACKS, make_front, many_stacks
from playwright.sync_api import Browser, Page

from stackopt.build import make_build_sheet
from stackopt.front import COLUMNS, Front, FrontRow
from stackopt.outputs.build_page import build_html
from stackopt.outputs.page import write_page
from stackopt.prediction import totals
from stackopt.problem import MagneticNearField, Mask, PlaneWave, Problem, Sheet

EVIL = "<img src=x onerror=window.hacked=1></script><script>window.hacked=1</script>"
PLACE = """([name, x, y]) => {
    const view = Bokeh.index.find_one(Bokeh.documents[0].get_model_by_name(name))
    const box = view.el.getBoundingClientRect()
    return [box.left + view.frame.x_scale.compute(x), box.top + view.frame.y_scale.compute(y)]
}"""
DATA = """([name, column]) => {
    const sources = Bokeh.documents[0]._all_models ? [...Bokeh.documents[0]._all_models.values()] : []
    const source = sources.find((model) => model.type === "ColumnDataSource" && model.name === name)
    return Array.from(source.data[column], (value) => ArrayBuffer.isView(value) ? Array.from(value) : value)
}"""


def data(page: Page, name: str, column: str) -> list[Any]:
    """A column of one of the page's data sources."""
    return list(page.evaluate(DATA, [name, column]))


def click_point(page: Page, front: Front, index: int) -> None:
    """Click a stack in the plot of cost over mass."""
    row = front.rows[index]
    x, y = page.evaluate(PLACE, ["mass cost", row.mass_kg_per_m2, row.cost_per_m2])
    page.mouse.click(x, y)
    page.wait_for_timeout(350)  # no hand is quicker; two clicks closer together count as a double click


def table(page: Page) -> str:
    return page.locator("table").first.inner_text() if page.locator("table").count() else ""


def four_stacks() -> Front:
    return make_front(stacks=[*STACKS, (Sheet("steel", 1e-3), Sheet("copper", 105e-6))])


def large_front(count: int) -> Front:
    """A front of many stacks with made-up margins; predicting each would take a minute."""
    problem = build_problem()
    rows = [
        FrontRow(stack, *totals(problem, stack), 1.0 + number / count, 1e3, problem.requirements[0].name)
        for number, stack in enumerate(many_stacks(count))
    ]
    return Front(problem, tuple(rows), True, "Complete: invented.")


@pytest.fixture
def front() -> Front:
    return four_stacks()


@pytest.fixture
def page(opened: Opened, front: Front, tmp_path: Path) -> Page:
    path = tmp_path / "trade_off.html"
    write_page(front, path, "run-1")
    return opened.open(path)


def test_page_opens_from_disk_without_errors_or_requests(opened: Opened, page: Page) -> None:
    page.wait_for_timeout(300)
    assert opened.errors == []
    assert len(opened.requests) == 1
    assert opened.requests[0].startswith("file://")
    assert page.evaluate("document.documentElement.scrollWidth") <= 1280
    for part in ("Invented", "Front of 4 stacks, complete, proved.", "Complete: invented.", "run run-1", "Cautions"):
        assert part in page.inner_text("body")
    assert "lightest" in table(page)


def test_clicking_a_point_draws_its_curve_section_and_column(opened: Opened, page: Page, front: Front) -> None:
    page.get_by_role("button", name="Clear choice").click()
    page.get_by_text("Nothing is chosen").wait_for(timeout=3000)
    assert data(page, "lines", "ys") == []
    plot = page.evaluate(PLACE, ["curves", 1e3, 60.0])
    clip = {"x": plot[0] - 300, "y": plot[1] - 60, "width": 700.0, "height": 160.0}
    before = page.screenshot(clip=clip)
    click_point(page, front, 3)
    assert "rank 4" in table(page)
    assert "steel 1mm" in table(page)
    assert f"{front.rows[3].mass_kg_per_m2:.3f}" in table(page)
    (curve,) = data(page, "lines", "ys")
    assert len(set(curve)) > 10
    assert data(page, "names", "text")[:2] == ["steel 1mm", "copper 105um"]
    top, bottom = data(page, "bars", "top"), data(page, "bars", "bottom")
    assert (top[0], bottom[0], bottom[1]) == pytest.approx((0.0, 1.0, 1.105))
    page.wait_for_timeout(200)
    assert page.screenshot(clip=clip) != before
    click_point(page, front, 1)
    assert "rank 2" in table(page)
    assert len(data(page, "lines", "ys")) == 2
    click_point(page, front, 3)
    assert data(page, "chosen", "index") == [1]
    assert opened.errors == []


def test_points_of_all_plots_are_one_choice_and_look_different(page: Page, front: Front) -> None:
    page.get_by_role("button", name="Clear choice").click()
    row = front.rows[2]
    x, y = page.evaluate(PLACE, ["mass thickness", row.mass_kg_per_m2, row.thickness_m * 1e3])
    page.mouse.click(x, y)
    click_point(page, front, 1)
    assert sorted(data(page, "chosen", "index")) == [1, 2]
    for column in ("colour", "marker"):
        assert len(set(data(page, "chosen", column))) == 2


def test_hovering_tells_the_stack_in_words(page: Page, front: Front) -> None:
    row = front.rows[3]
    x, y = page.evaluate(PLACE, ["mass cost", row.mass_kg_per_m2, row.cost_per_m2])
    page.mouse.move(x - 40, y - 20)
    page.mouse.move(x, y, steps=4)
    page.get_by_text("steel 1mm / copper 105um", exact=True).first.wait_for(timeout=3000)


def test_keyboard_chooses_and_narrows(opened: Opened, page: Page, front: Front) -> None:
    page.get_by_role("button", name="Clear choice").focus()
    page.keyboard.press("Enter")
    page.locator("select").focus()
    page.keyboard.press("Home")
    page.keyboard.press("ArrowDown")
    assert data(page, "chosen", "index") == [1]
    assert "rank 2" in table(page)
    upper = page.locator(".noUi-handle-upper").first
    upper.focus()
    for _ in range(3):
        page.keyboard.press("ArrowLeft")
    page.get_by_text("3 of 4 stacks within the limits").wait_for(timeout=3000)
    assert page.locator("select option").count() == 3
    heaviest = int(np.argmax([row.mass_kg_per_m2 for row in front.rows]))
    assert not any(text.startswith(f"{heaviest + 1}") for text in page.locator("select option").all_inner_texts())
    assert opened.errors == []


def test_hidden_stacks_leave_the_choice_and_cannot_be_clicked(page: Page, front: Front) -> None:
    page.get_by_role("button", name="Clear choice").click()
    heaviest = int(np.argmax([row.mass_kg_per_m2 for row in front.rows]))
    click_point(page, front, heaviest)
    assert data(page, "chosen", "index") == [heaviest]
    page.locator(".noUi-handle-upper").first.focus()
    for _ in range(3):
        page.keyboard.press("ArrowLeft")
    page.get_by_text("3 of 4 stacks within the limits").wait_for(timeout=3000)
    assert data(page, "chosen", "index") == []
    click_point(page, front, heaviest)
    assert data(page, "chosen", "index") == []


def test_the_choice_is_saved_with_the_columns_of_a_front(page: Page, front: Front) -> None:
    page.get_by_role("button", name="Clear choice").click()
    click_point(page, front, 0)
    click_point(page, front, 2)
    with page.expect_download() as waiting:
        page.get_by_role("button", name="Save chosen as CSV").click()
    frame = pd.read_csv(waiting.value.path())
    assert list(frame.columns) == list(COLUMNS)
    expected = front.to_frame().iloc[[0, 2]].reset_index(drop=True)
    pd.testing.assert_frame_equal(frame.sort_values("rank").reset_index(drop=True), expected, check_dtype=False)


def evil_problem() -> Problem:
    problem = build_problem(
        LOOPS,
        MagneticNearField(0.05),
        PlaneWave(),
        masks=(Mask((0.0, 10.0, 1e3), (1.0, 1.0, 10.0)), Mask((1.5e5,), (30.0,)), Mask((1e6, 1e9), (80.0, 125.0))),
    )
    name = "steel <b>&{x}@stack"
    materials = {**problem.materials, name: dataclasses.replace(problem.materials["steel"], name=name, notes=EVIL)}
    named = [dataclasses.replace(one, name=f"{n}{EVIL}") for n, one in enumerate(problem.requirements)]
    return dataclasses.replace(
        problem, title=EVIL, currency="<i>E", materials=materials, requirements=tuple(named), name=EVIL
    )


def test_user_texts_are_shown_as_they_are(opened: Opened, tmp_path: Path) -> None:
    front = make_front(evil_problem(), [*STACKS, (Sheet("steel <b>&{x}@stack", 1e-3),)])
    path = tmp_path / "trade_off.html"
    write_page(dataclasses.replace(front, statement=EVIL), path, EVIL)
    page = opened.open(path)
    page.locator("select").focus()
    page.keyboard.press("End")
    assert page.evaluate("window.hacked") is None
    assert opened.errors == []
    assert len(opened.requests) == 1
    assert "<b>&{x}@stack 1mm" in table(page)
    assert EVIL in page.inner_text("h1")
    sheet = tmp_path / "build_sheet.html"
    sheet.write_text(build_html(make_build_sheet(front, 4), EVIL), encoding="utf-8")
    page.goto(sheet.as_uri())
    assert page.evaluate("window.hacked") is None
    assert opened.errors == []
    assert "steel <b>&{x}@stack" in page.inner_text("body")
    assert EVIL in page.inner_text("body")


@pytest.mark.parametrize(
    "objectives", [("mass",), ("mass", "margin"), ("mass", "cost", "thickness", "sheets", "margin")]
)
def test_any_objectives_make_a_page(objectives: tuple[str, ...], opened: Opened, tmp_path: Path) -> None:
    path = tmp_path / "trade_off.html"
    write_page(make_front(build_problem(objectives=objectives)), path)
    page = opened.open(path)
    assert opened.errors == []
    assert "rank" in table(page)
    assert page.evaluate("document.documentElement.scrollWidth") <= 1280


@pytest.mark.parametrize("count", [1, 2])
def test_small_fronts_make_a_page(count: int, opened: Opened, tmp_path: Path) -> None:
    path = tmp_path / "trade_off.html"
    write_page(make_front(stacks=STACKS[:count], complete=False), path)
    page = opened.open(path)
    assert opened.errors == []
    assert "not proved complete" in page.inner_text("body")
    assert "rank 1" in table(page)


def test_alternatives_are_shown_with_marks_of_their_own(opened: Opened, tmp_path: Path) -> None:
    front, others = make_front(), make_front(stacks=[*STACKS, (Sheet("steel", 1e-3), Sheet("copper", 105e-6))])
    path = tmp_path / "trade_off.html"
    write_page(dataclasses.replace(front, alternatives=others.rows), path)
    page = opened.open(path)
    assert data(page, "stacks", "rank") == ["1", "2", "3", "a1"]
    assert data(page, "stacks", "shape")[3] == "inverted_triangle"
    assert opened.errors == []


def test_a_thousand_stacks_stay_small_and_quick(opened: Opened, tmp_path: Path) -> None:
    front = large_front(1000)
    path = tmp_path / "trade_off.html"
    write_page(front, path)
    assert path.stat().st_size <= 3_000_000 + 2_000 * len(front)
    page = opened.open(path)
    began = time.perf_counter()
    page.get_by_role("button", name="Clear choice").click()
    click_point(page, front, 500)
    assert len(data(page, "chosen", "index")) >= 1
    page.locator(".noUi-handle-upper").first.focus()
    page.keyboard.press("ArrowLeft")
    page.get_by_text(re.compile(r"9\d\d of 1000 stacks within the limits")).wait_for(timeout=5000)
    assert time.perf_counter() - began < 5.0
    assert opened.errors == []


def test_a_front_without_stacks_says_so(opened: Opened, tmp_path: Path) -> None:
    path = tmp_path / "trade_off.html"
    write_page(Front(build_problem(), (), True, "No stack meets the mask: proved."), path)
    opened.page.goto(path.as_uri())
    assert "No stack that meets the mask. No stack meets the mask: proved." in opened.page.inner_text("body")
    assert opened.errors == []


def test_build_sheet_prints_on_two_pages(browser: Browser, front: Front, tmp_path: Path) -> None:
    path = tmp_path / "build_sheet.html"
    path.write_text(build_html(make_build_sheet(front, 2, (0.12, 0.08), (0.3, 0.2)), "run-1"), encoding="utf-8")
    page = browser.new_page()
    page.goto(path.as_uri())
    printed = page.pdf(prefer_css_page_size=True)
    page.close()
    assert 1 <= len(re.findall(rb"/Type\s*/Page\b", io.BytesIO(printed).getvalue())) <= 2
