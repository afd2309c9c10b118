"""The method as one page of plain HTML that asks for nothing else."""

from __future__ import annotations

import base64
import hashlib
import html
import importlib
import inspect
import pkgutil
import re
from collections.abc import Iterator, Sequence
from importlib.resources import files
from itertools import pairwise
from types import ModuleType
from typing import NamedTuple

from markdown_it import MarkdownIt
from markdown_it.token import Token

import service.detection
import service.digits
from service.detection import bank, baseline
from service.detection.policy import Policy
from service.digits import measures
from service.digits.evidence import CONCENTRATIONS
from service.digits.views import WATCHED_VIEWS

_LEAD_DIGIT, _LEAD_PAIR, _TAIL_PAIR = range(len(WATCHED_VIEWS))


class Page(NamedTuple):
    """A page, and the headers that keep it from asking for or running anything."""

    html: str
    headers: dict[str, str]


def method() -> Page:
    """Return the page, rendered from ``method.md`` with the numbers and functions of the code."""
    here = files(__package__)
    text = (here / "method.md").read_text("utf-8")
    style = (here / "page.css").read_text("utf-8")
    text = text.replace("[[numbers]]", _table(("what", "value", "policy field"), _numbers()))
    text = text.replace("[[functions]]", _table(("function", "what it does"), _functions()))
    reader = MarkdownIt("commonmark", {"html": False}).enable("table")
    tokens = reader.parse(text)
    contents = _label(tokens)
    body = reader.renderer.render(tokens, reader.options, {})
    digest = base64.b64encode(hashlib.sha256(style.encode()).digest()).decode()
    policy = (
        f"default-src 'none'; style-src 'sha256-{digest}'; base-uri 'none'; form-action 'none'; "
        "frame-ancestors 'none'"
    )
    headers = {
        "Content-Security-Policy": policy,
        "Referrer-Policy": "no-referrer",
        "Cache-Control": "max-age=300",
    }
    return Page(_document(style, contents, body), headers)


def _label(tokens: Sequence[Token]) -> str:
    """Give headings an id and table headings a scope; return the contents as a list of links."""
    links = []
    for opening, inline in pairwise(tokens):
        if opening.type == "heading_open":
            name = re.sub(r"[^a-z0-9]+", "-", inline.content.lower()).strip("-")
            opening.attrSet("id", name)
            if opening.tag == "h2":
                links.append(f'<li><a href="#{name}">{html.escape(inline.content)}</a></li>')
        elif opening.type == "th_open":
            opening.attrSet("scope", "col")
    return f"<ul>\n{chr(10).join(links)}\n</ul>"


def _document(style: str, contents: str, body: str) -> str:
    return f"""<!DOCTYPE html>
<html lang="en">
<head>
<meta charset="utf-8">
<meta name="viewport" content="width=device-width, initial-scale=1">
<title>The method: Tallyward</title>
<style>{style}</style>
</head>
<body>
<nav aria-label="Contents">
{contents}
</nav>
<main>
{body}</main>
</body>
</html>
"""


def _table(heads: Sequence[str], rows: Iterator[tuple[str, ...]]) -> str:
    lines = [heads, ["---"] * len(heads), *rows]
    return "\n".join(
        f"| {' | '.join(cell.replace('|', chr(92) + '|') for cell in line)} |" for line in lines
    )


def _listed(values: Sequence[float]) -> str:
    return ", ".join(f"{value:g}" for value in values)


def _numbers() -> Iterator[tuple[str, str, str]]:
    """Yield what is in force: name, value, and the policy's field where it may differ."""
    usual = Policy()
    tolerances = usual.tolerances()
    cells, shapes = bank.CELL_WEIGHTS.sum(), bank.SHAPE_WEIGHTS.sum()
    joint = 1 - cells - shapes
    phases = sorted(set(bank.SHIFT_PHASE.tolist()))
    yield (
        "rows per false alarm, A",
        f"{usual.transactions_per_false_alarm:,.0f}",
        "`transactions_per_false_alarm`",
    )
    yield "tolerance of the leading views", f"{tolerances[_LEAD_DIGIT]:g}", "`tolerance`"
    yield "tolerance of the tail pair", f"{tolerances[_TAIL_PAIR]:g}", "half of `tolerance`"
    yield "rows of a baseline", f"{usual.baseline_size:,}", "`baseline_size`"
    yield "days of a baseline", f"{usual.baseline_days:g}", "`baseline_days`"
    yield "confidence of a baseline", f"{usual.baseline_confidence:g}", "`baseline_confidence`"
    yield "rows for a score", f"{usual.minimum_count:,}", "`minimum_count`"
    yield "bounds of one baseline, m", f"{baseline.BOUNDS}", ""
    yield (
        "level at which a block shows a cell in bursts",
        f"{baseline.DISPERSION_LEVEL:g}, shared by the blocks",
        "",
    )
    yield "rows from which a block counts", f"{baseline.BLOCK_ROWS}", ""
    yield (
        "level at which cells speak against the law",
        f"{baseline.REFUTING_LEVEL:g}, shared by the cells",
        "",
    )
    yield "level at which a cell is excepted from the law", f"{baseline.EXCEPTION_LEVEL:g}", ""
    yield "level of an excepted cell's own bound", f"{baseline.EXCEPTION_ERROR:g}", ""
    yield "rows from which a view is judged for the law", f"{baseline.ROWS_FROM:,}", ""
    yield "rows from which harmonics are judged", f"{baseline.HARMONICS_FROM:,}", ""
    yield "contaminations ε of the cell detectors", _listed(bank.EPSILONS.tolist()), ""
    shares = _listed((bank.EPSILON_SHARES / bank.EPSILON_SHARES[0]).tolist())
    yield "their weights, in proportion", shares, ""
    yield "contamination of the CUSUMs", f"{bank.CUSUM_GAIN:g}", ""
    for view, weight in zip(WATCHED_VIEWS, bank.VIEW_WEIGHTS.tolist(), strict=True):
        yield f"weight of the cells of `{view}`", f"{weight:.3g}", ""
    yield "weight of the shape detectors", f"{shapes:.3g}", ""
    yield "weight of the joint detectors", f"{joint:.3g}", ""
    yield "shares of invented digits, in shape detectors", _listed(bank.INVENTED.tolist()), ""
    yield (
        "shifts on the circle, in shape detectors",
        f"ρ = {_listed(sorted(set(bank.SHIFT_RHO.tolist())))}; {len(phases)} phases φ",
        "",
    )
    for view, kappas in CONCENTRATIONS.items():
        yield f"κ of the e-value of `{view}`", _listed(kappas), ""
    for view, lines in measures.CUT_OFFS.items():
        yield f"published lines of the MAD of `{view}`", _listed(lines), ""


def _functions() -> Iterator[tuple[str, str]]:
    """Yield every public function of the pure code, with what its documentation begins with."""
    for package in (service.digits, service.detection):
        for module in _modules(package):
            for name, function in inspect.getmembers(module, inspect.isfunction):
                if function.__module__ == module.__name__ and not name.startswith("_"):
                    summary = inspect.cleandoc(function.__doc__ or "").split("\n\n")[0]
                    yield f"`{module.__name__}.{name}`", " ".join(summary.split())


def _modules(package: ModuleType) -> Iterator[ModuleType]:
    for module in pkgutil.iter_modules(package.__path__, f"{package.__name__}."):
        yield importlib.import_module(module.name)
