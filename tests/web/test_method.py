"""The method page: served without a key or a network, in order, exact, and true to the code."""

from __future__ import annotations

import base64
import hashlib
import importlib
import inspect
import pkgutil
import re
from html.parser import HTMLParser
from itertools import pairwise
from pathlib import Path
from types import ModuleType

import pytest

import service.detection
import service.digits
from service.detection import bank
from service.detection.policy import Policy
from tests.web.described import DescribedClient
from tests.web.test_openapi import PROMISE

VOID = ("meta", "br", "hr")


class Read(HTMLParser):
    """What a page holds: every element with its attributes, and the text inside some of them."""

    def __init__(self, html: str) -> None:
        super().__init__()
        self.elements: list[tuple[str, dict[str, str | None]]] = []
        self.open: list[str] = []
        self.texts: dict[str, list[str]] = {}
        self.feed(html)
        self.close()
        assert self.open == []

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.elements.append((tag, dict(attrs)))
        self.texts.setdefault(tag, []).append("")
        if tag not in VOID:
            self.open.append(tag)

    def handle_endtag(self, tag: str) -> None:
        assert self.open.pop() == tag

    def handle_data(self, data: str) -> None:
        for tag in set(self.open):
            self.texts[tag][-1] += data

    def all(self, *tags: str) -> list[dict[str, str | None]]:
        return [attributes for tag, attributes in self.elements if tag in tags]


@pytest.fixture
def html(client: DescribedClient) -> str:
    return client.get("/method", headers={}).get_data(as_text=True)


@pytest.fixture
def page(html: str) -> Read:
    return Read(html)


def _words(text: str) -> str:
    return " ".join(text.split())


def test_it_is_served_to_anyone_and_linked_from_the_front_door(client: DescribedClient) -> None:
    link = client.get("/", headers={}).get_json()["links"]["method"]
    answer = client.get(link, headers={})
    assert answer.status_code == 200
    assert answer.content_type == "text/html; charset=utf-8"
    assert client.head(link, headers={}).status_code == 200
    assert "/method" in client.document["paths"]
    readme = Path(service.digits.__path__[0]).parents[1] / "README.md"
    assert "/method" in readme.read_text("utf-8")


def test_headings_are_in_order_and_the_contents_lead_to_them(page: Read) -> None:
    levels = [int(tag[1]) for tag, _ in page.elements if re.fullmatch("h[1-6]", tag)]
    assert levels[0] == 1
    assert levels.count(1) == 1
    assert len(levels) > 20
    for before, after in pairwise(levels):
        assert after <= before + 1
    names = [attributes["id"] for attributes in page.all("h1", "h2", "h3")]
    assert len(set(names)) == len(names)
    contents = [attributes["href"] for attributes in page.all("a")]
    assert contents == [f"#{attributes['id']}" for attributes in page.all("h2")]


def test_it_says_what_it_is_to_those_who_listen(page: Read) -> None:
    assert page.all("html")[0]["lang"] == "en"
    assert page.texts["title"] == ["The method: Tallyward"]
    assert len(page.all("main")) == 1
    assert page.all("nav")[0]["aria-label"]
    assert page.all("th")
    assert all(attributes["scope"] == "col" for attributes in page.all("th"))
    assert {"name": "viewport", "content": "width=device-width, initial-scale=1"} in page.all(
        "meta"
    )


def test_it_asks_for_nothing_and_runs_nothing(client: DescribedClient, page: Read) -> None:
    tags = {tag for tag, _ in page.elements}
    assert not tags & {"script", "img", "link", "iframe", "object", "embed", "form", "base"}
    for _, attributes in page.elements:
        assert not attributes.keys() & {"src", "srcset", "style", "action", "background"}
        assert not any(name.startswith("on") for name in attributes)
        assert (attributes.get("href") or "#").startswith("#")
    (style,) = page.texts["style"]
    assert "url(" not in style
    assert "@import" not in style
    assert "prefers-color-scheme: dark" in style
    headers = client.get("/method", headers={}).headers
    digest = base64.b64encode(hashlib.sha256(style.encode()).digest()).decode()
    policy = headers["Content-Security-Policy"]
    assert "default-src 'none'" in policy
    assert f"style-src 'sha256-{digest}'" in policy
    assert "frame-ancestors 'none'" in policy
    assert "unsafe" not in policy
    assert headers["X-Content-Type-Options"] == "nosniff"
    assert headers["Referrer-Policy"] == "no-referrer"


def test_the_promise_is_made_in_its_exact_words_once(page: Read) -> None:
    text = _words(page.texts["main"][0])
    assert text.count(PROMISE) == 1
    assert PROMISE in [_words(quote) for quote in page.texts["blockquote"]]
    after = text.split(PROMISE)[1]
    assert after.startswith(
        " Price changes and promotions are real changes, not false alarms. Alarms may come together"
    )


@pytest.mark.parametrize(
    "said",
    [
        "reason to look, never proof of fraud",
        "A person reviews each alarm",
        "lawful grounds",
        "Local law",
        "card schemes",
        "Data protection",
        "Diffuse change under the tolerance",
        "Serial dependence and bursts",
        "Deficits are seen only through excess elsewhere",
        "Adversaries who know the law",
        "Selection bias",
        "Baselines learned from a stream that already cheats",
        "law_misfit stays visible",
        "Cells with little data",
        "Silence is not a clean bill",
        "Most honest merchants do not follow the law",
    ],
)
def test_what_must_be_said_is_said(page: Read, said: str) -> None:
    assert said in _words(page.texts["main"][0])


def _public(package: ModuleType) -> set[str]:
    found = set()
    for module in pkgutil.iter_modules(package.__path__, f"{package.__name__}."):
        for name, function in inspect.getmembers(importlib.import_module(module.name)):
            if inspect.isfunction(function) and function.__module__ == module.name:
                found.add(f"{module.name}.{name}")
    return {path for path in found if not path.rpartition(".")[2].startswith("_")}


def test_what_it_names_exists_and_every_public_function_is_named(page: Read) -> None:
    named = {code for code in page.texts["code"] if code.startswith("service.")}
    for path in named:
        module, _, name = path.rpartition(".")
        try:
            importlib.import_module(path)
        except ModuleNotFoundError:
            assert hasattr(importlib.import_module(module), name), path
    missing = (_public(service.digits) | _public(service.detection)) - named
    assert not missing
    assert {"service.streams.fold", "service.streams.verdicts.guarantee"} <= named


def test_its_numbers_are_those_in_force(page: Read) -> None:
    text = _words(page.texts["main"][0])
    assert f"rows per false alarm, A {Policy().transactions_per_false_alarm:,.0f}" in text
    assert f"weight of the cells of lead_pair {bank.VIEW_WEIGHTS[1]:.3g}" in text
    assert f"confidence of a baseline {Policy().baseline_confidence:g}" in text
    assert "[[" not in text


def test_each_paper_in_the_text_is_in_the_list(html: str) -> None:
    """By its first author and year, as in "Lindon & Malek 2022" or "Hill (1995"."""
    body, _, papers = html.partition('<h2 id="papers">')
    body = body.partition('<h2 id="where-it-is-computed">')[0]
    others = r"(?:,? [^.;|<(]{0,30}?&amp; [A-Z][a-z]+)?"
    pattern = rf"([A-Z][a-zü]+){others} \(?((?:18|19|20)\d\d)"
    cited = set(re.findall(pattern, body))
    assert len(cited) > 20
    listed = set(re.findall(r"<li>([A-Z][a-zü]+).*?\((\d{4})\)", papers))
    assert cited <= listed, cited - listed
