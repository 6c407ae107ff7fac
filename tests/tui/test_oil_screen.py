"""The oil path on the screen: moving, folding, the way of a cause, the drawing as a file."""

from __future__ import annotations

from pathlib import Path
from typing import Any
from xml.etree import ElementTree

from tests.tui.stage import PUMP_WEAR, Stage, play, the_app


def view(stage: Stage) -> Any:
    return stage.app.screen.query_one("#oil")


async def opened(stage: Stage) -> None:
    await stage.press("o")
    await stage.until(lambda: view(stage).drawing is not None)


async def redrawn(stage: Stage, *keys: str) -> None:
    """Keys after which the circuit is laid out anew."""
    screen: Any = stage.app.screen
    before = screen.laid_out
    await stage.press(*keys)
    await stage.until(lambda: screen.laid_out > before)


def test_moves_to_neighbours_and_shows_their_modes(tmp_path: Path) -> None:
    async def course(stage: Stage) -> None:
        await opened(stage)
        view(stage).select("pressure_pump")
        await stage.press("left")
        assert view(stage).selected == "suction_line"
        await stage.press("right")
        assert view(stage).selected == "pressure_pump"
        await stage.press("right")
        assert view(stage).selected == "pressure_filter"
        await stage.press("down")
        assert view(stage).selected == "filter_bypass"
        await stage.press("up")
        assert view(stage).selected == "pressure_filter"
        card = stage.app.screen.as_text()  # type: ignore[attr-defined]
        assert "Pressure filter" in card
        for mode in stage.look().circuit.components["pressure_filter"].modes[:1]:
            assert mode.title in card

    play(the_app(tmp_path, findings=PUMP_WEAR), course, (120, 36))


def test_every_part_can_be_reached_with_the_arrows(tmp_path: Path) -> None:
    async def course(stage: Stage) -> None:
        await opened(stage)
        oil = view(stage)
        reached, open_ = {oil.selected}, [oil.selected]
        while open_:
            start = open_.pop()
            for way in ("left", "right", "up", "down"):
                oil.selected = start
                oil.move(way)
                if oil.selected not in reached:
                    reached.add(oil.selected)
                    open_.append(oil.selected)
        assert reached == set(oil.layout_.parts)

    play(the_app(tmp_path, findings=PUMP_WEAR), course, (120, 36))


def test_folds_on_a_small_screen_and_opens_on_enter(tmp_path: Path) -> None:
    async def course(stage: Stage) -> None:
        await opened(stage)
        oil = view(stage)
        rows = oil.drawing.rows
        assert max(len(row) for row in rows) <= 80
        assert len(rows) <= 22
        folded = next(p for p in oil.layout_.parts.values() if p.folded and p.title == "suction")
        oil.select(folded.id)
        await redrawn(stage, "enter")
        assert set(folded.members) <= set(oil.layout_.parts)
        assert oil.selected in folded.members
        await redrawn(stage, "enter")
        assert oil.selected == folded.id
        await redrawn(stage, "f")
        assert not any(p.folded for p in oil.layout_.parts.values())

    play(the_app(tmp_path, findings=PUMP_WEAR), course)


def test_way_of_each_cause_is_numbered_from_the_cause(tmp_path: Path) -> None:
    async def course(stage: Stage) -> None:
        await opened(stage)
        screen: Any = stage.app.screen
        first = screen.marks.cause
        await redrawn(stage, "n")
        assert screen.marks.cause != first
        plain = view(stage).drawing.plain()
        if screen.marks.way:
            assert "①" in plain
        await redrawn(stage, "p")
        assert screen.marks.cause == first
        await redrawn(stage, "t")
        media = {run.pipe.medium for run in view(stage).layout_.runs}
        also = {medium for run in view(stage).layout_.runs for medium in run.also}
        assert "heat" in media | also
        await stage.press("escape")
        assert stage.screen_is("CaseScreen")

    play(the_app(tmp_path, findings=PUMP_WEAR), course, (120, 36))


def test_drawing_goes_to_a_file_beside_the_log(tmp_path: Path) -> None:
    async def course(stage: Stage) -> None:
        await opened(stage)
        await stage.press("g")
        path = tmp_path / "case-oil-path.svg"
        await stage.until(lambda: path.exists() and path.stat().st_size > 0)
        await stage.until(lambda: str(path)[:20] in stage.text("#top"))
        root = ElementTree.parse(path).getroot()
        assert root.tag == "{http://www.w3.org/2000/svg}svg"
        words = "".join(root.itertext())
        assert "Decision support only" in words
        assert "oil_pressure@hot_idle=52psi" in words

    play(the_app(tmp_path), course)
