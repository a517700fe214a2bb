"""The report page: whole, self-contained, and harmless whatever the names in it."""

from __future__ import annotations

import re
from html.parser import HTMLParser
from pathlib import Path
from typing import Any

import pytest

from nearhand.client.pdf import print_page
from nearhand.client.report import folded, render
from nearhand.configs import builtin_text
from nearhand.service.errors import ConfigError
from nearhand.service.rigs import rig_from_toml

HOSTILE = "<script>alert(1)</script>"
VOID = {"meta", "br", "hr", "img", "input", "link"}


class Page(HTMLParser):
    """Collects tags and text, and checks that what is opened is closed."""

    def __init__(self) -> None:
        super().__init__()
        self.open: list[str] = []
        self.tags: list[tuple[str, dict[str, str | None]]] = []
        self.text = ""

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append((tag, dict(attrs)))
        if tag not in VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append((tag, dict(attrs)))

    def handle_endtag(self, tag: str) -> None:
        assert self.open.pop() == tag

    def handle_data(self, data: str) -> None:
        self.text += data


def figure(value: float, **beside: Any) -> dict[str, Any]:
    """Return one measured figure."""
    return {"value": value, "low": value - 0.1, "high": value + 0.1, "n": 20, "unit": "m", "better": "low", **beside}


def trace(shift: float) -> dict[str, Any]:
    """Return a short trace of the crane's channels."""
    return {
        "times_s": [0.0, 0.02, 0.04],
        "observations": [[shift + step * (channel + 1) for channel in range(6)] for step in range(3)],
        "actions": [[shift], [0.1], [0.2]],
    }


@pytest.fixture
def facts() -> dict[str, Any]:
    """Everything that a page shows, with hostile names wherever a person may write one."""
    rig = rig_from_toml(builtin_text("rigs", "crane")).model_dump(mode="json")
    channels = [{"name": one["name"], "unit": one["unit"]} for one in rig["observations"]]
    actions = [{"name": one["name"], "unit": one["unit"]} for one in rig["actions"]]
    bound = {"figure": "closed_loop.score", "met": False, "sentence": f"closed_loop.score {HOSTILE}"}
    events = [
        {"event": 1, "utc": "2024-05-01T00:00:00.000Z", "what": "refused", "who": HOSTILE, "why": HOSTILE,
         "detail": {"version": 2, "bounds": [bound]}},
    ]  # fmt: skip
    return {
        "version": {
            "version": 2, "rig": "crane", "method": "proximal-online", "state": "measured", "created_utc": "now",
            "sha256": "ab" * 32, "provenance": {"note": HOSTILE, "long": ["x"] * 1000}, "refusal": HOSTILE,
            "measurement": {
                "figures": {
                    "feature_distance.l2": figure(0.3, floor=figure(0.2), clone=figure(0.4)),
                    "closed_loop.score": figure(0.9),
                    "mmd2": {**figure(0.1), "value": None, "low": None, "high": None},
                },
                "traces": {
                    "period_s": 0.02, "differ_most_at_s": 0.02, "observations": channels, "actions": actions,
                    "expert": trace(0.0), "policy": trace(0.1), "episode": 1,
                },
                "notes": [HOSTILE],
            },
        },
        "rig": {**rig, "title": HOSTILE},
        "episodes": [
            {"state": "closed", "operator": HOSTILE, "samples": 3, "outcome": "success", "split": "train"},
        ],
        "events": events,
        "chain": {"intact": True, "events": 1, "first_bad": None, "message": ""},
        "health": {"mode": "armed", "version": 2, "queries": 5, "interventions": 1, "trips": 0},
        "learning": {"chosen": {"name": "clone", "reason": HOSTILE}, "curves": {"ess": [0.5, None, 0.7]}},
        "inspection": [HOSTILE],
    }  # fmt: skip


def test_the_page_is_whole_and_shows_every_figure(facts: dict[str, Any]) -> None:
    page = Page()
    page.feed(render(facts))
    assert page.open == []
    for name in facts["version"]["measurement"]["figures"]:
        assert name in page.text
    assert "0.3 [0.2, 0.4]" in page.text
    for heading in ("The demonstrations", "Distance to the expert", "The gate", "Learning", "Provenance", "Cautions"):
        assert heading in page.text


def test_every_name_is_escaped(facts: dict[str, Any]) -> None:
    html = render(facts)
    assert "<script" not in html
    assert html.count("&lt;script&gt;") >= 9


def test_nothing_comes_from_outside(facts: dict[str, Any]) -> None:
    page = Page()
    page.feed(html := render(facts))
    assert not {"script", "link", "iframe", "img", "object"} & {tag for tag, _ in page.tags}
    for _, attributes in page.tags:
        for name in ("src", "href", "xlink:href"):
            assert (attributes.get(name) or "#").startswith("#")
    assert not re.search(r"url\((?!#)", html)


def test_every_picture_has_words(facts: dict[str, Any]) -> None:
    page = Page()
    page.feed(render(facts))
    pictures = [attributes for tag, attributes in page.tags if tag == "figure"]
    assert len(pictures) == 4
    assert all(picture.get("aria-label") for picture in pictures)


def test_an_unmeasured_version_has_a_page_too(facts: dict[str, Any]) -> None:
    facts["version"]["measurement"] = None
    facts["learning"], facts["inspection"], facts["health"], facts["events"] = {}, [], None, []
    page = Page()
    page.feed(render(facts))
    assert page.open == []
    assert "has not been measured" in page.text
    assert "No release was asked for yet" in page.text


def test_everyday_events_are_told_in_one_line() -> None:
    row = {"utc": "t", "who": "action-server", "why": ""}
    events = [
        {**row, "event": number, "what": what}
        for number, what in enumerate(["session", "session", "job-done", "trip", "session", "release"], start=1)
    ]
    told = [(one["event"], one["what"]) for one in folded(events)]
    assert told == [(1, "2 session, 1 job-done"), (4, "trip"), (5, "1 session"), (6, "release")]


def test_a_machine_without_a_browser_says_so(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    monkeypatch.setenv("PATH", str(tmp_path))
    with pytest.raises(ConfigError, match="none of chromium"):
        print_page(tmp_path / "page.html", tmp_path / "page.pdf")
