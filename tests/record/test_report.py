"""Reports: complete, self-contained, and with nothing in them that a text smuggled in.

The fields of the record are those of 14 CFR 43.9(a)(1)-(4), checked by name.
"""

from __future__ import annotations

import re
import xml.etree.ElementTree as ET
from html.parser import HTMLParser
from importlib.resources import files

import pytest

from diag.errors import InputError, UsageError
from diag.record.casefile import case_file
from diag.record.events import Rectified, Standing
from diag.record.plot import MOST, series_of, standings_plot, steps_of
from diag.record.rendering import plain_markdown
from diag.record.report import FIELDS, NOT_A_RELEASE, cautions, open_items, report
from tests.record.cases import (
    HOSTILE,
    NAME,
    found,
    head,
    hostile_case,
    loaded,
    numbered,
    standing,
    worked_case,
)

NOTICE = "The approved data governs."
VOID = {"meta", "br", "link", "img", "input", "hr"}


class Page(HTMLParser):
    """A page as a parser reads it: elements, attributes and text, and whether it nests."""

    def __init__(self, text: str) -> None:
        super().__init__(convert_charrefs=True)
        self.open: list[str] = []
        self.tags: list[tuple[str, dict[str, str | None]]] = []
        self.words: list[str] = []
        self.faults: list[str] = []
        self.feed(text)
        self.close()

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append((tag, dict(attrs)))
        if tag not in VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append((tag, dict(attrs)))

    def handle_endtag(self, tag: str) -> None:
        if not self.open or self.open.pop() != tag:
            self.faults.append(tag)

    def handle_data(self, data: str) -> None:
        if self.open and self.open[-1] != "style":
            self.words.append(data)

    @property
    def text(self) -> str:
        return " ".join(" ".join(self.words).split())


def page(**more: object) -> Page:
    made = Page(report("html", loaded(NAME), worked_case(), NOTICE, **more))  # type: ignore[arg-type]
    assert made.faults == []
    assert made.open == []
    return made


def plain(text: str) -> str:
    """Markdown without its escapes."""
    return re.sub(r"\\(.)", r"\1", text)


SAID = [
    NOTICE,
    NOT_A_RELEASE,
    "E-17",
    "A-3",
    "pressure low at hot idle",
    "2026-03-01 22:00+02:00",
    "Oil pressure gauge, hot idle",
    "52psi",
    "72-00-11",
    "twice",
    "withdrawn by entry 4",
    "PP-0412",
    "PP-0977",
    "72-00-30",
    "B. Fitter",
    "by entry 10",
    "Cause confirmed",
    "Verified by entry 10: Oil pressure gauge, hot idle: 78psi",
    "laboratory shut",
    "Still open: ",
    *FIELDS,
]


@pytest.mark.parametrize("form", ["html", "md"])
@pytest.mark.parametrize("said", SAID)
def test_it_says_what_a_report_must_say(form: str, said: str) -> None:
    text = report(form, loaded(NAME), worked_case(), NOTICE)
    assert said in (Page(text).text if form == "html" else plain(text))


def test_the_record_has_the_fields_of_the_rule() -> None:
    """14 CFR 43.9(a): description or reference; date; name; signature, number, kind."""
    text = " ".join(FIELDS).lower()
    for words in (
        "description of the work performed, or reference to data acceptable",
        "date of completion",
        "name of the person",
        "signature",
        "certificate number",
        "kind of certificate",
    ):
        assert words in text
    assert "return to service" in NOT_A_RELEASE


def test_checks_come_in_order_with_person_time_reference_and_result() -> None:
    rows = re.findall(
        r'<td class="number">(\d+)</td>', report("html", loaded(NAME), worked_case(), NOTICE)
    )
    assert rows == ["2", "3", "7", "10", "9"]
    text = plain(report("md", loaded(NAME), worked_case(), NOTICE))
    row = next(line for line in text.splitlines() if line.startswith("| 2 |"))
    title = loaded(NAME).observables["pressure_trend"].record.title
    assert row.split(" | ")[:6] == [
        "| 2",
        "2026-03-01 22:10+02:00",
        "A. Fitter",
        title,
        "drift: twice",
        "72-00-11",
    ]
    assert "70 %" in row


def test_the_page_needs_nothing_beside_it_and_runs_nothing() -> None:
    made = page()
    tags = {tag for tag, _ in made.tags}
    assert not tags & {"script", "link", "img", "iframe", "object", "embed", "image", "use", "a"}
    for tag, attributes in made.tags:
        for name, value in attributes.items():
            assert not name.startswith("on"), tag
            assert name not in ("src", "href", "xlink:href", "style", "action"), tag
            assert name == "xmlns" or "://" not in (value or ""), (tag, name)
    policy = next(a["content"] for t, a in made.tags if a.get("http-equiv"))
    assert policy == "default-src 'none'; style-src 'unsafe-inline'"
    style = report("html", None, worked_case(), NOTICE).split("<style>")[1].split("</style>")[0]
    assert "url(" not in style
    assert "@import" not in style
    assert "@page" in style
    assert "@media print" in style


def test_the_page_can_be_read_aloud() -> None:
    made = page()
    attributes = dict(made.tags[[tag for tag, _ in made.tags].index("html")][1])
    assert attributes == {"lang": "en"}
    levels = [int(tag[1]) for tag, _ in made.tags if re.fullmatch(r"h\d", tag)]
    assert levels[0] == 1
    assert set(levels[1:]) == {2}
    assert all("scope" in a for t, a in made.tags if t == "th")
    plot = next(a for t, a in made.tags if t == "svg" and a.get("role") == "img")
    assert "Pressure pump" in (plot["aria-label"] or "")


@pytest.mark.parametrize("form", ["html", "md"])
def test_text_stays_text(form: str) -> None:
    events = hostile_case()
    text = report(form, loaded(NAME), events, NOTICE, warnings=[HOSTILE])
    if form == "html":
        made = Page(text)
        assert made.faults == []
        assert not {tag for tag, _ in made.tags} & {"script", "b", "a", "code"}
        assert made.text.count("<script>alert('x')</script>") >= 15
    else:
        assert "<script" not in text.replace("\\<", "")
        assert not re.search(r"(?<!\\)[`<]", text)
        assert not re.search(r"(?<!\\)\[a", text)
        assert "*not bold*" not in text.replace("\\*", "")
        rows = [line for line in text.splitlines() if line.startswith("| 1 |")]
        assert [len(re.findall(r"(?<!\\)\|", row)) for row in rows] == [8]


def test_markdown_is_flat() -> None:
    assert plain_markdown("a\n# b\x1b[2J") == "a \\# b\N{REPLACEMENT CHARACTER}\\[2J"
    assert plain_markdown("&lt;") == "&amp;lt;"


def test_a_picture_is_laid_in_and_checked() -> None:
    picture = '<svg viewBox="0 0 4 4"><title>oil path</title><path d="M0,0 L4,4"/></svg>'
    assert picture in report("html", loaded(NAME), worked_case(), NOTICE, picture=picture)
    assert "Oil path with suspicion" in page(picture=picture).text
    assert "Oil path with suspicion" not in page().text
    for bad in (
        "text",
        "<svg><script>1</script></svg>",
        '<svg onload="x()"></svg>',
        '<svg><image href="http://x.example/a.png"/></svg>',
        '<svg><use href="#a"/></svg>',
        "<svg><style>@import 'x'</style></svg>",
        "<svg></svg><p>more</p>",
    ):
        with pytest.raises(UsageError, match="one SVG element"):
            report("html", loaded(NAME), worked_case(), NOTICE, picture=bad)


def test_forms_and_cases_that_are_none() -> None:
    with pytest.raises(UsageError, match="use md or html"):
        report("pdf", None, worked_case(), NOTICE)
    with pytest.raises(InputError, match="does not begin"):
        report("md", None, [], NOTICE)


def test_it_reads_without_its_circuit_and_says_so() -> None:
    text = Page(report("html", None, worked_case(), NOTICE)).text
    assert "relief_valve_turboprop is not at hand" in text
    assert "pressure trend" in text
    assert "drift" in text
    other = [
        e.model_copy(update={"content_hash": "0"}) if e.number == 0 else e for e in worked_case()
    ]
    assert "with other content" in plain(report("md", loaded(NAME), other, NOTICE))


def test_what_is_open_is_listed() -> None:
    circuit = loaded(NAME)
    still = case_file(worked_case(closed=False)[:-1])
    items = "\n".join(open_items(circuit, still))
    remedy = circuit.remedies["pressure_pump_replace"].record.title
    assert "The case is not closed." in items
    assert f"Not verified: {remedy} (entry 9)." in items
    assert f"Still open: {circuit.openings['cowl'].title}." in items
    assert circuit.openings["line_ends"].title not in items
    done = open_items(circuit, case_file(worked_case()))
    assert not [item for item in done if "verified" in item or "closed" in item]
    bad = numbered([*worked_case(closed=False)[:-1], found("oil_pressure", "51psi", "hot_idle")])
    assert any("Not verified" in item for item in open_items(circuit, case_file(bad)))


def test_cautions_are_those_of_the_steps_taken() -> None:
    circuit = loaded(NAME)
    told = cautions(circuit, case_file(worked_case()))
    remedy = circuit.remedies["pressure_pump_replace"].record
    assert remedy.cautions
    assert {circuit.cautions[code] for code in remedy.cautions} <= set(told)
    assert len(told) == len(set(told))
    assert cautions(circuit, case_file([head()])) == []


# The plot


def test_the_plot_shows_the_probabilities_that_were_recorded() -> None:
    events = worked_case()
    assert [event.number for event in steps_of(events)] == [0, 1, 2, 7]
    series = series_of(loaded(NAME), events)
    assert [line.ref for line in series[:2]] == ["pressure_pump.worn", "supply_lines.external_leak"]
    assert series[0].chances == (None, 0.3, 0.7, 0.95)
    root = ET.fromstring(standings_plot(loaded(NAME), events))
    space = "{http://www.w3.org/2000/svg}"
    lines = [g for g in root.iter(f"{space}g") if g.get("fill") == "none"]
    assert len(lines) == len(series)
    pump = next(g for g in lines if "Pressure pump" in g.findtext(f"{space}title", ""))
    marks = [p.get("transform", "") for p in pump.iter(f"{space}path") if p.get("transform")]
    heights = [float(re.findall(r"[\d.]+", mark)[1]) for mark in marks]
    # The picture runs from 0 at the bottom to 1 at the top: heights fall by equal shares.
    scale = (heights[0] - heights[1]) / (0.7 - 0.3)
    assert heights[1] - heights[2] == pytest.approx(scale * 0.25, abs=0.2)
    dashes = [g.find(f"{space}path").get("stroke-dasharray") for g in lines]  # type: ignore[union-attr]
    assert len(set(dashes)) == len(dashes)


def test_a_line_breaks_where_nothing_is_known() -> None:
    rows = [standing(a__b=0.5), standing(c__d=0.5), standing(a__b=0.4), standing(a__b=0.3)]
    events = numbered([head(after=None), *(found("oil_look", "clear", after=row) for row in rows)])
    svg = standings_plot(None, events)
    (path,) = re.findall(r'<path d="(M[^"]+)" stroke-width="1.8"/>', svg)
    assert path.count("M") == 2
    assert path.count("L") == 1


def test_many_steps_and_causes_stay_readable() -> None:
    rows = [
        Standing(causes=tuple((f"c{(n + k) % 9}.m", (n % 7 + 1 - k / 10) / 10) for k in range(5)))
        for n in range(200)
    ]
    events = numbered([head(), *(found("oil_look", "clear", after=row) for row in rows)])
    assert len(series_of(None, events)) == MOST
    ticks = re.findall(
        r'text-anchor="middle" font-size="11" fill="#333333">\d+<', standings_plot(None, events)
    )
    assert 10 < len(ticks) <= 25
    assert standings_plot(None, [head(after=None)]) == ""


def test_templates_travel_with_the_package() -> None:
    names = {entry.name for entry in (files("diag.record") / "templates").iterdir()}
    assert names >= {"report.html.j2", "report.md.j2", "handover.md.j2", "plot.svg.j2"}


def test_a_wrong_swap_is_told_apart_from_the_fix() -> None:
    events = worked_case(closed=False)
    swap = Rectified(at=events[-1].at, rectification="relief_valve_set_pressure")
    text = plain(report("md", loaded(NAME), numbered([*events, swap]), NOTICE))
    rows = [line for line in text.splitlines() if re.match(r"\| (9|11) \|", line)]
    assert [row.rsplit(" | ", 1)[1] for row in rows] == ["by entry 10 |", "not verified |"]
