"""The start page and the page for errors: what they say, and that they need nothing from elsewhere."""

from __future__ import annotations

import re
from collections.abc import Iterator
from html.parser import HTMLParser
from pathlib import Path

import pytest
from flask import Flask
from flask.testing import FlaskClient

from service import create_app, create_services
from service.pages.start import CAUTION
from service.settings import load_settings
from service.store.schema import migrate

# Elements without an end tag (HTML living standard, 13.1.2, from memory).
VOID = {"area", "base", "br", "col", "embed", "hr", "img", "input", "link", "meta", "source", "track", "wbr"}


class Outline(HTMLParser):
    """Reads a page, checks that its elements are nested, and keeps its links and headings."""

    def __init__(self, text: str) -> None:
        super().__init__()
        self.open: list[str] = []
        self.links: list[str] = []
        self.seen: list[str] = []
        self.language: str | None = None
        self.feed(text)
        assert self.open == []

    def handle_starttag(self, tag: str, attributes: list[tuple[str, str | None]]) -> None:
        given = dict(attributes)
        self.seen.append(tag)
        self.links += [value for name in ("href", "src") if (value := given.get(name))]
        self.language = given.get("lang") or self.language
        if tag not in VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag: str, attributes: list[tuple[str, str | None]]) -> None:
        self.seen.append(tag)

    def handle_endtag(self, tag: str) -> None:
        assert self.open.pop() == tag


@pytest.fixture(scope="module")
def app(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Flask]:
    settings = load_settings({"SHOALMARK_DATA_FOLDER": str(tmp_path_factory.mktemp("pages"))})
    migrate(settings.database_url)
    app = create_app(create_services(settings))
    yield app
    app.extensions["shoalmark"].close()


@pytest.fixture
def client(app: Flask) -> FlaskClient:
    return app.test_client()


@pytest.mark.parametrize("path", ["/", "/nothing"])
def test_a_page_is_sound_and_needs_nothing_from_elsewhere(client: FlaskClient, path: str) -> None:
    response = client.get(path)
    page = Outline(response.get_data(as_text=True))
    assert page.language == "en"
    assert page.seen.count("h1") == page.seen.count("main") == page.seen.count("title") - ("svg" in page.seen)
    for link in page.links:
        assert link.startswith(("/", "#"))
        if link.startswith("/"):
            with client.get(link) as linked:
                assert linked.status_code == 200, link
    policy = response.headers["Content-Security-Policy"]
    assert "default-src 'self'" in policy and "unsafe" not in policy
    assert "style=" not in response.get_data(as_text=True)


def test_the_start_page_says_what_runs_and_the_caution(client: FlaskClient) -> None:
    text = " ".join(client.get("/").get_data(as_text=True).split())
    assert "/openapi.yaml" in text
    assert CAUTION.replace("'", "&#39;") in text
    assert "able to record decisions" in text
    assert "No answer from this service means hold" in text


def test_an_error_page_does_not_repeat_what_was_asked(client: FlaskClient) -> None:
    text = client.get("/<script>alert(1)</script>").get_data(as_text=True)
    assert "<script" not in text
    assert re.search(r"request [0-9a-f-]{36}", text)


def contrast(one: str, other: str) -> float:
    """Give the contrast ratio of two colours. Source: WCAG 2.1, contrast ratio and relative luminance."""

    def luminance(colour: str) -> float:
        parts = [int(colour[index : index + 2], 16) / 255 for index in (1, 3, 5)]
        red, green, blue = [p / 12.92 if p <= 0.04045 else ((p + 0.055) / 1.055) ** 2.4 for p in parts]
        return 0.2126 * red + 0.7152 * green + 0.0722 * blue

    light, dark = sorted((luminance(one), luminance(other)), reverse=True)
    return (light + 0.05) / (dark + 0.05)


def test_the_theme_is_readable_and_stands_in_one_place() -> None:
    assert contrast("#000000", "#ffffff") == pytest.approx(21)  # WCAG 2.1: the largest ratio there is
    import service.pages

    folder = Path(service.pages.__file__).parent
    assert [file.name for file in folder.rglob("*.css")] == ["theme.css"]
    css = (folder / "static" / "theme.css").read_text()
    schemes = re.findall(r":root \{([^}]*)\}", css)
    assert len(schemes) == 3  # light, dark, print
    for scheme in schemes:
        colours = dict(re.findall(r"--(\w+): (#[0-9a-f]{3,6});", scheme))
        colours = {
            name: value if len(value) == 7 else "#" + "".join(2 * digit for digit in value[1:])
            for name, value in colours.items()
        }
        # WCAG 2.1, 1.4.6 and 1.4.3 (from memory): 7 for text; 4.5 for what is said by more than colour.
        assert contrast(colours["ink"], colours["paper"]) >= 7
        assert contrast(colours["faint"], colours["paper"]) >= 4.5
        assert contrast(colours["needed"], colours["paper"]) >= 4.5
    # No colour is named outside of the scheme.
    assert not re.search(r"#[0-9a-f]{3,6}", re.sub(r":root \{[^}]*\}", "", css))


def test_every_page_of_a_demo_says_so(tmp_path: Path) -> None:
    settings = load_settings({"SHOALMARK_DATA_FOLDER": str(tmp_path), "SHOALMARK_DEMO": "yes"})
    migrate(settings.database_url)
    demo = create_app(create_services(settings))
    try:
        for path in ("/", "/no-such-page"):
            assert "Demo: an invented plant" in demo.test_client().get(path).text
    finally:
        demo.extensions["shoalmark"].close()


def test_a_plant_in_earnest_does_not_call_itself_a_demo(client: FlaskClient) -> None:
    assert "Demo" not in client.get("/").text
