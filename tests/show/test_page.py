"""The page of a run in a real browser, offline: what is shown is held against the front, the problem and the decks."""

from __future__ import annotations

import re
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

from optisize.front.choose import where
from optisize.front.details import details
from optisize.front.run import Run, load_run
from optisize.front.table import sizes_of
from optisize.quantities import write
from optisize.show.page import write_page
from optisize.simulator.deck import benched, write_deck
from tests.conftest import call
from tests.show.browsing import HOSTILE, left, opened, settled
from tests.test_problems import ROOT


def row_of(run: Run, number: int) -> pd.DataFrame:
    return run.front[run.front["design"] == number]


def deck_of(run: Run, number: int) -> str:
    """Return the deck that `optisize deck` writes."""
    sizes = sizes_of(run.problem, row_of(run, number))
    return write_deck(run.problem, sizes, f"design {number} of {run.path}", benched(run.problem)).text


def rows(tab: Any) -> list[int]:
    """Return the numbers of the designs in the table, in its order."""
    settled(tab)
    return [int(text.strip("● ")) for text in tab.locator("#designs tbody tr:visible .number").all_inner_texts()]


def test_it_says_where_it_comes_from(tab: Any, sample: Run) -> None:
    facts = tab.inner_text("#facts")
    assert sample.problem.hashes["problem"] in facts
    assert sample.problem.process_name in facts
    assert f"optisize {sample.info['optisize']}" in facts
    assert re.search(r"on \d{4}-\d\d-\d\d", facts)
    assert tab.inner_text("#caution").startswith("A starting point")
    assert left(tab) == "200 of 200 designs"


def test_numbers_are_written_as_everywhere(tab: Any) -> None:
    """The page's engineering notation is that of the package; a text that is read gives the number back."""
    generator = np.random.default_rng(1)
    values = [*10.0 ** generator.uniform(-14, 12, 300), 0.0, 1.0, 9.9996e-7, 999.96, -3.2e-4, np.inf, -np.inf]
    for unit in ("A", "V", "Hz", "ohm", "S", "V/Hz^0.5", "m"):
        shown = tab.evaluate("([v, u]) => v.map(x => optisizePage.write(x, u))", [values, unit])
        assert shown == [write(v, unit) for v in values]
    for unit, some in (("dB", (63.66, 0.0, -3.5)), ("m^2", (5.3943e-9, 1e-12)), ("V/s", (5.317e6,)), ("", (16.0,))):
        assert tab.evaluate("([v, u]) => v.map(x => optisizePage.write(x, u))", [some, unit]) == [
            write(v, unit) for v in some
        ]
    read = "([texts, key]) => texts.map(t => optisizePage.read(t, optisizePage.columns.get(key)))"
    assert tab.evaluate(read, [["6 uA", "6u", "6", "6e-6 A", "6 µA"], "supply_current"]) == pytest.approx([6e-6] * 5)
    assert tab.evaluate(read, [["6 V", "much", "", "6 xA"], "supply_current"]) == [None] * 4
    assert tab.evaluate(read, [["3000 um^2", "3000", "3e-9 m^2"], "area"]) == pytest.approx([3e-9] * 3)


def test_every_axis_is_labelled_and_its_ticks_stand_at_their_values(tab: Any, sample: Run) -> None:
    """Ticks are few, inside, and say where they stand; a label has the unit and the way that is better."""
    axes = tab.evaluate(
        """() => Bokeh.documents[0].roots().flatMap(plot => ["x", "y"].map((letter, i) => {
            const range = plot[`${letter}_range`], axis = (letter === "x" ? plot.below : plot.left)[0];
            const name = `${plot.name}.${letter}`, c = optisizePage.columns.get(plot.tags[i]);
            const ticks = optisizePage.ticks(name, range.start, range.end);
            return {key: c.key, log: c.log, kind: c.kind, shown: c.shown, label: axis.axis_label, ticks,
                    start: range.start, end: range.end,
                    values: ticks.map(t => optisizePage.read(optisizePage.tickText(name, t), c))};
        }))"""
    )
    assert len(axes) == 2 * (3 + 1 + 7)
    for axis in axes:
        ticks, places = np.array(axis["ticks"]), np.array(axis["values"], dtype=float)
        assert 2 <= len(ticks) <= 8, axis
        assert (ticks >= axis["start"]).all()
        assert (ticks <= axis["end"]).all()
        np.testing.assert_allclose(np.log10(places) if axis["log"] else places, ticks, rtol=1e-4, atol=1e-9)
        assert f"[{axis['shown']}]" in axis["label"] or not axis["shown"]
        better = {"gain": "higher is better →", "cmrr": "higher is better →", "supply_current": "← lower is better"}
        assert better.get(axis["key"], "") in axis["label"]
    measures = {m: sample.problem.find(m).scale == "log" for m in ("gain", "cmrr", "supply_current", "power")}
    assert {a["key"]: a["log"] for a in axes if a["key"] in measures} == measures


def test_a_box_in_one_plot_selects_the_same_designs_everywhere(tab: Any, sample: Run) -> None:
    frame = tab.locator("#view-goals-1")
    frame.scroll_into_view_if_needed()
    box = frame.bounding_box()
    corners = [(box["x"] + fx * box["width"], box["y"] + fy * box["height"]) for fx, fy in ((0.3, 0.2), (0.6, 0.6))]
    tab.mouse.move(*corners[0])
    tab.mouse.down()
    tab.mouse.move(*corners[1], steps=5)
    tab.mouse.up()
    settled(tab)
    (x0, y0), (x1, y1) = tab.evaluate(
        """corners => {
            const plot = Bokeh.documents[0].roots()[1], view = Bokeh.index.find_one(plot);
            const at = view.el.getBoundingClientRect();
            return corners.map(([x, y]) => [view.frame.x_scale.invert(x - at.left),
                                            view.frame.y_scale.invert(y - at.top)]);
        }""",
        corners,
    )
    current, gain = np.log10(sample.front["supply_current [A]"]), sample.front["gain [dB]"]
    inside = (current > x0) & (current < x1) & (gain < y0) & (gain > y1)
    expected = set(sample.front["design"][inside])
    assert 5 < len(expected) < 195
    marked = tab.locator("#designs tr.brushed .number").all_inner_texts()
    assert {int(text.strip("● ")) for text in marked} == expected
    assert tab.inner_text("#brushed") == f"{len(expected)} of them selected"
    one_source = "() => new Set(Bokeh.documents[0].roots().flatMap(p => p.renderers.map(r => r.data_source))).size"
    assert tab.evaluate(one_source) == 1
    tab.check("#only")
    assert set(rows(tab)) == expected
    tab.keyboard.press("Escape")
    assert len(rows(tab)) == 200


def test_a_tap_on_a_design_picks_it(tab: Any) -> None:
    at = tab.evaluate(
        """() => {
            const plot = Bokeh.documents[0].roots()[1], view = Bokeh.index.find_one(plot);
            const data = Bokeh.documents[0].get_model_by_name("designs").data, box = view.el.getBoundingClientRect();
            return [box.left + view.frame.x_scale.compute(data[plot.tags[0]][0]),
                    box.top + view.frame.y_scale.compute(data[plot.tags[1]][0])];
        }"""
    )
    tab.mouse.move(*at)
    tab.mouse.click(*at)
    settled(tab)
    assert tab.input_value("#pick-a") == "0"
    assert tab.evaluate("() => Bokeh.documents[0].get_model_by_name('picked').indices") == [0]


def test_sliders_narrow_the_front_as_conditions_do(tab: Any, sample: Run) -> None:
    names = [box.get_attribute("data-key") for box in tab.locator("#sliders fieldset").all()]
    assert names == list(sample.problem.needed)
    tab.fill("[aria-label='gain, least, typed']", "18 dB")
    tab.fill("[aria-label='supply current, most, typed']", "5u")
    tab.keyboard.press("Enter")
    expected = where(sample.front, ["gain>=18 dB", "supply_current<=5 uA"])
    assert left(tab) == f"{len(expected)} of 200 designs"
    assert rows(tab) == list(expected["design"])
    drawn = tab.evaluate("() => Bokeh.documents[0].get_model_by_name('kept').booleans")
    assert list(sample.front["design"][drawn]) == list(expected["design"])
    tab.click("#widen")
    assert left(tab) == "200 of 200 designs"
    slider = tab.locator("[data-key=cmrr] input[data-end=least]")
    box = slider.bounding_box()
    tab.mouse.move(box["x"] + 9, box["y"] + box["height"] / 2)
    tab.mouse.down()
    tab.mouse.move(box["x"] + box["width"] / 2, box["y"] + box["height"] / 2, steps=4)
    tab.mouse.up()
    bound = float(slider.get_attribute("aria-valuetext").split()[0])
    cmrr = sample.front["cmrr [dB]"]
    assert cmrr.min() < bound < cmrr.max()
    count = int(left(tab).split()[0])
    assert (cmrr >= bound + 0.01).sum() <= count <= (cmrr >= bound - 0.01).sum()


def test_headings_sort_and_say_so(tab: Any, sample: Run) -> None:
    for name, heading in (("gain", "gain [dB]"), ("area", "area [m^2]"), ("tail.units", "tail.units")):
        cell = tab.locator(f"#designs thead th[data-key='{name}']")
        seen = set()
        for _ in range(2):
            cell.locator("button").click()
            values = sample.front.set_index("design")[heading].loc[rows(tab)].to_numpy()
            down = cell.get_attribute("aria-sort") == "descending"
            assert (np.diff(values) * (-1 if down else 1) >= 0).all()
            seen.add(down)
        assert seen == {True, False}


def test_two_designs_stand_beside_each_other(tab: Any, sample: Run) -> None:
    for slot, number in (("a", 16), ("b", 72)):
        tab.locator(f"#designs tr[data-row='{number - 1}'] .mark.{slot}").click()
    settled(tab)
    both = pd.concat([row_of(sample, 16), row_of(sample, 72)])
    shown = " ".join(tab.inner_text("#card").replace("\u00a0", " ").split())
    t, r = (lambda d: (d.transistors, d.resistors))(details(sample.problem, sizes_of(sample.problem, both)))
    for i in range(2):
        finger, length = write(t.finger_width[0][i], "m", 9), write(t.length[0][i], "m", 9)
        assert f"{t.fingers[0][i]:.0f} fingers of {finger} / {length}" in shown
        assert f"{r.squares[0][i]:.9g} squares, {write(r.length[0][i], 'm', 9)} long" in shown
        for name in ("vgs", "vdsat", "gm", "margin", "id"):
            unit = {"gm": "S", "id": "A"}.get(name, "V")
            assert write(float(f"{t.figures[name][0][i]:.6g}"), unit, 3) in shown
        room = both["bandwidth [Hz]"].iloc[i] - 1e6
        assert f"{write(room, 'Hz', 3)} ({100 * room / 1e6:.3g} %) left" in shown
    gain = np.diff(both["gain [dB]"])[0]
    assert f"{'+' if gain > 0 else chr(0x2212)}{abs(gain):.3g} dB {'▲ better' if gain > 0 else '▽ worse'}" in shown
    span = sample.front["gain [dB]"]
    place = 100 * (both["gain [dB]"] - span.min()) / (span.max() - span.min())
    assert f"A {place.iloc[0]:.3g} %, B {place.iloc[1]:.3g} % of the way to the best" in shown
    before = tab.inner_text("#card")
    tab.click("#swap")
    settled(tab)
    assert tab.inner_text("#card") != before
    assert tab.input_value("#pick-a") == "71"


@pytest.mark.parametrize("way", ["clipboard", "command", "by hand"])
def test_the_deck_that_is_copied_is_that_of_the_deck_command(tab: Any, sample: Run, way: str) -> None:
    """With the clipboard of a modern browser, without it, and where a browser allows neither."""
    without = "Object.defineProperty(navigator, 'clipboard', {value: undefined, configurable: true})"
    tab.select_option("#pick-a", "15")
    settled(tab)
    if way != "clipboard":
        tab.evaluate(without)
    if way == "by hand":
        tab.evaluate("() => { document.execCommand = () => false; }")
    tab.click("#copy")
    tab.wait_for_function("document.getElementById('copied').textContent")
    tab.evaluate("() => { delete navigator.clipboard; delete document.execCommand; }")
    wanted = deck_of(sample, 16)
    assert tab.input_value("#deck") == wanted
    if way == "by hand":
        assert tab.inner_text("#copied").startswith("Selected")
        assert tab.evaluate("() => getSelection().toString()") == wanted
        return
    assert tab.inner_text("#copied") == "Copied"
    tab.evaluate("() => document.body.prepend(Object.assign(document.createElement('textarea'), {id: 'paste'}))")
    tab.focus("#paste")
    tab.keyboard.press("Control+V")
    pasted = tab.input_value("#paste")
    tab.evaluate("() => document.getElementById('paste').remove()")
    assert pasted == wanted


def test_the_deck_is_saved_under_the_name_of_the_design(tab: Any, sample: Run) -> None:
    tab.select_option("#pick-b", "15")
    tab.select_option("#deck-of", "b")
    settled(tab)
    with tab.expect_download() as download:
        tab.click("#save")
    assert download.value.suggested_filename == "design-16.sp"
    assert download.value.path().read_bytes() == deck_of(sample, 16).encode()


def test_a_keyboard_is_enough(tab: Any, sample: Run) -> None:
    """Skip to the table, sort, pick, compare, move a slider and copy, without a mouse."""

    def go(selector: str, key: str = "Tab", most: int = 90) -> None:
        for _ in range(most):
            tab.keyboard.press(key)
            if tab.evaluate("s => document.activeElement.matches(s)", selector):
                width = tab.evaluate("() => getComputedStyle(document.activeElement).outlineWidth")
                assert width == "3px" or "range" in selector, selector
                return
        raise AssertionError(f"{selector} cannot be reached")

    go(".skip", most=1)
    tab.keyboard.press("Enter")
    go("th[data-key=gain] button")
    tab.keyboard.press("Enter")
    assert rows(tab)[0] == sample.front["design"][sample.front["gain [dB]"].idxmax()]
    go("#designs .mark.a")
    for _ in range(3):
        tab.keyboard.press("ArrowDown")
    tab.keyboard.press("Enter")
    settled(tab)
    picked = int(tab.input_value("#pick-a"))
    assert sample.front["design"][picked] == rows(tab)[3]
    go("#designs .mark.b", most=1)
    tab.keyboard.press("End")
    tab.keyboard.press("Enter")
    settled(tab)
    assert sample.front["design"][int(tab.input_value("#pick-b"))] == rows(tab)[-1]
    go("#copy")
    tab.keyboard.press("Enter")
    tab.wait_for_function("document.getElementById('copied').textContent === 'Copied'")
    assert tab.input_value("#deck") == deck_of(sample, int(sample.front["design"][picked]))
    tab.evaluate("() => document.getElementById('widen').focus()")
    go("input[type=range][aria-label='gain, least']")
    for _ in range(5):
        tab.keyboard.press("PageUp")
    count = int(left(tab).split()[0])
    assert 0 < count < 200
    tab.keyboard.press("Home")
    assert left(tab) == "200 of 200 designs"


def test_every_control_has_a_name(tab: Any) -> None:
    unnamed = tab.evaluate(
        """() => [...document.querySelectorAll("button, select, input, textarea, a[href]")]
            .filter(e => !(e.getAttribute("aria-label") || e.textContent.trim() || e.labels?.length))
            .map(e => e.outerHTML)"""
    )
    assert unnamed == []


def test_a_hostile_title_is_text(browser: Any, sample: Run, tmp_path: Path) -> None:
    run = replace(sample, front=sample.front.iloc[:5], path=Path("a</script><b>&"))
    run = replace(run, problem=replace(sample.problem, title=HOSTILE, process_name="<script>p</script>"))
    with opened(browser, write_page(run, tmp_path / "page.html")) as tab:
        shown = HOSTILE.replace("\n", "?")
        assert tab.inner_text("#title") == shown
        assert tab.title() == shown
        assert "<script>p</script>" in tab.inner_text("#facts")
        assert tab.evaluate("() => window.broken") is None
        assert tab.evaluate("() => document.querySelectorAll('img').length") == 0
        assert "?/script?" in tab.input_value("#deck")


@pytest.fixture(scope="module")
def telescopic(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The page of a stage with many transistors, long names and rejections without end."""
    folder = tmp_path_factory.mktemp("many") / "run"
    words = ["--to", str(folder), "--generations", "12", "--population", "60", "--no-figures", "--quiet"]
    assert call("search", str(ROOT / "problems" / "low-supply-telescopic.toml"), *words).exit_code == 0
    return write_page(load_run(folder), folder / "page.html")


def test_long_names_and_many_transistors_fit(browser: Any, telescopic: Path) -> None:
    """In both themes nothing makes the page wider than the window, and no plot is wider than its place."""
    with opened(browser, telescopic, color_scheme="dark") as tab:
        assert tab.evaluate("() => document.documentElement.dataset.theme") == "dark"
        tab.emulate_media(color_scheme="light")
        tab.wait_for_function("document.documentElement.dataset.theme === 'light'")
        tab.evaluate("() => { document.getElementById('all-measures').open = true; }")
        tab.select_option("#any-x", "cmrr")
        tab.select_option("#pick-b", "1")
        for size in (1280, 390):
            tab.set_viewport_size({"width": size, "height": 800})
            tab.wait_for_timeout(300)
            assert tab.evaluate("() => document.documentElement.scrollWidth") <= size
            wide = "() => [...document.querySelectorAll('.view')].map(v => [v.clientWidth, v.firstChild.clientWidth])"
            assert all(0 < inner <= outer for outer, inner in tab.evaluate(wide))
        assert "unlimited" in tab.inner_text("#all-measures")
        label = "() => Bokeh.documents[0].roots().find(p => p.name === 'any').below[0].axis_label"
        assert "without a figure" in tab.evaluate(label)
        tab.click("#theme")
        assert tab.evaluate("() => document.documentElement.dataset.theme") == "dark"


def test_one_goal_and_one_design_make_a_page(browser: Any, sample: Run, tmp_path: Path) -> None:
    problem = replace(sample.problem, goals=sample.problem.goals[:1])
    run = replace(sample, problem=problem, front=sample.front.iloc[:1])
    with opened(browser, write_page(run, tmp_path / "page.html")) as tab:
        assert left(tab) == "1 of 1 designs"
        assert tab.locator("[id^=view-goals]").count() == 0
        assert "one goal" in tab.inner_text("#goals-hint")
