"""A sizing as a page of its own: one HTML file with its figure inside, readable without anything else."""

from __future__ import annotations

import base64
from collections.abc import Sequence
from html import escape
from pathlib import Path

from driblet.commands.requirement_rows import percent
from driblet.commands.screen import number
from driblet.version import __version__
from driblet_analysis.sizing import FIGURE, PAGE, RUN_FILE, Sizing
from driblet_analysis.sizing_model import clopper_pearson
from driblet_analysis.sizing_words import Words
from driblet_analysis.sweep.files import write_text
from driblet_analysis.sweep.keypaths import toml_text

_STYLE = (
    "body{font:16px/1.5 Georgia,serif;max-width:58rem;margin:2rem auto;padding:0 1rem;color:#33302b;background:#fdfcf9}"
    "h1{font-size:1.4rem}h2{font-size:1.1rem;margin-top:2rem}.answer{border-left:4px solid #d55e00;padding:.2rem 1rem}"
    "table{border-collapse:collapse}td,th{padding:.15rem .9rem .15rem 0;text-align:right;border-bottom:1px solid #e9e5dd}"
    "td:first-child,th:first-child{text-align:left}img{max-width:100%}pre{overflow-x:auto;font-size:.8rem}"
    ".caution{color:#5b564c;font-style:italic}"
)


def write_page(result: Sizing, words: Words) -> Path:
    """Write the page into the sizing's folder, the figure being there already."""
    image = base64.b64encode((result.folder / FIGURE).read_bytes()).decode()
    question, finding = result.question, result.finding
    title = f"{question.system.title}: {question.path} for {question.requirement}"
    parts = [
        f"<h1>{escape(title)}</h1>",
        f'<p class="answer">{escape(words.headline)}</p>',
        f'<p class="caution">{escape(words.caution)}</p>',
        f'<img alt="Share of compartments against {escape(question.path)}" src="data:image/png;base64,{image}">',
        *(f"<p>{escape(line)}</p>" for line in words.details),
    ]
    if words.fresh is not None:
        f = words.fresh
        text = (
            f"In {words.compartments} new compartments at {question.text(finding.at)} it is met in {percent(f.value)} % "
            f"({percent(f.low)} to {percent(f.high)}); they are in {RUN_FILE}."
        )
        parts += ["<h2>At this value</h2>", f"<p>{escape(text)}</p>"]
    if words.loads:
        rows = [[one.name, number(one.copies), number(one.concentration_M * 1e6)] for one in words.loads]
        parts.append(_table(["in the median compartment", "mean copies", "µM"], rows))
    if words.failing:
        parts += ["<h2>What still fails</h2>", f"<p>{escape(words.failing)}.</p>"]
    if words.traits:
        rows = [
            [f"{t.quantity} ({t.unit})", number(t.failing), number(t.meeting), f"{t.effect:+.2f}", number(t.p, 2)]
            for t in words.traits
        ]
        head = ["at the start", "failing, median", "meeting, median", "effect, −1 to 1", "corrected p"]
        parts.append(_table(head, rows))
    rows = []
    for t in finding.tried:
        exact = clopper_pearson(t.met, t.trials)
        share = f"{percent(exact.value)} ({percent(exact.low)} to {percent(exact.high)})"
        rows.append([str(question.text(t.value)), t.phase, str(t.trials), str(t.met), share])
    parts += ["<h2>Every value tried</h2>", _table(["value", "", "compartments", "met", "% (95 % interval)"], rows)]
    parts += ["<h2>The system</h2>", f"<pre>{escape(toml_text(question.raw))}</pre>", f"<p>driblet {__version__}</p>"]
    page = (
        f'<!doctype html><html lang="en"><head><meta charset="utf-8"><title>{escape(title)}</title>'
        f"<style>{_STYLE}</style></head><body>{''.join(parts)}</body></html>\n"
    )
    path = result.folder / PAGE
    write_text(path, page)
    return path


def _table(head: Sequence[str], rows: Sequence[Sequence[str]]) -> str:
    top = "".join(f"<th>{escape(cell)}</th>" for cell in head)
    body = "".join(f"<tr>{''.join(f'<td>{escape(cell)}</td>' for cell in row)}</tr>" for row in rows)
    return f"<table><tr>{top}</tr>{body}</table>"
