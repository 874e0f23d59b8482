"""The page of a proof test: self-contained HTML, made from the stored report alone."""

from __future__ import annotations

from html import escape
from typing import Any

from kneewise.workshop.evidence import FAILED, Value

STYLE = """
:root { --ink: #1d2733; --line: #c9d1da; --good: #1b6b3a; --bad: #a31621; --pale: #f4f6f8; }
* { box-sizing: border-box; }
body { font: 15px/1.45 "Segoe UI", "DejaVu Sans", Arial, sans-serif; color: var(--ink);
  max-width: 62rem; margin: 2rem auto; padding: 0 1.2rem; }
h1 { font-size: 1.6rem; margin: 0 0 .3rem; }
h2 { font-size: 1.2rem; margin: 2.2rem 0 .6rem; }
h3 { font-size: 1rem; margin: 1.4rem 0 .3rem; display: flex; gap: .7rem; align-items: baseline; }
h3 .id { color: #5b6875; min-width: 1.8rem; }
h3 .result { margin-left: auto; }
.label { background: #f6c945; color: #221a00; font-weight: 700; letter-spacing: .12em;
  text-align: center; padding: .5rem; margin-bottom: 1.2rem; border: 2px solid #221a00; }
.verdict { font-size: 1.3rem; font-weight: 700; padding: .5rem .9rem; border-left: .5rem solid;
  background: var(--pale); margin: 1rem 0; }
.verdict small { display: block; font-size: .95rem; font-weight: 400; color: var(--ink); }
.passed { color: var(--good); } .failed, .stopped { color: var(--bad); }
table { border-collapse: collapse; width: 100%; font-size: .92rem; }
th, td { text-align: left; vertical-align: top; padding: .3rem .6rem .3rem 0;
  border-bottom: 1px solid var(--line); }
thead th { border-bottom: 2px solid var(--ink); }
.facts th { width: 11rem; font-weight: 600; }
.values td:nth-child(2) { white-space: nowrap; font-variant-numeric: tabular-nums; }
.values td:first-child { width: 42%; } .values td:nth-child(2) { width: 22%; }
.values td:last-child { width: 4.5rem; }
.guards td:nth-child(1) { width: 3rem; } .guards td:nth-child(3) { width: 5.5rem; }
.guards td:nth-child(4) { width: 8rem; }
p { margin: .25rem 0; } .asked { color: #44515e; } .reason { font-weight: 600; }
code { font-size: .85rem; word-break: break-all; }
footer { margin-top: 2.5rem; padding-top: .8rem; border-top: 2px solid var(--ink); }
@media print { body { margin: 0; max-width: none; font-size: 11px; }
  section, tr { break-inside: avoid; } h2, h3 { break-after: avoid; } }
"""


def page_of(document: dict[str, Any]) -> str:
    """The whole page, for a document as `report.py` stores it."""
    report = document["report"]
    title = f"Proof test of tracer {report['device_id']}"
    label = report["label"]
    banner = f'<div class="label" role="note">{escape(label)}: no real tracer was proven</div>'
    parts = [
        banner if label else "",
        f"<h1>{escape(title)}</h1>",
        _verdict(report),
        _facts(report),
        "<h2>Guards</h2>",
        _guards(report["guards"]),
        "<h2>Steps</h2>",
        *(_step(step) for step in report["steps"]),
        _footer(document),
    ]
    shown = f"{label}: {title}" if label else title
    return (
        '<!doctype html>\n<html lang="en">\n<head>\n<meta charset="utf-8">\n'
        '<meta name="viewport" content="width=device-width, initial-scale=1">\n'
        f"<title>{escape(shown)}</title>\n<style>{STYLE}</style>\n</head>\n<body>\n"
        + "\n".join(part for part in parts if part)
        + "\n</body>\n</html>\n"
    )


def _verdict(report: dict[str, Any]) -> str:
    verdict = report["verdict"]
    more = f"Stopped {report['stopped']}." if report["stopped"] else ""
    small = f"<small>{escape(more)}</small>" if more else ""
    return f'<div class="verdict {escape(verdict)}">{escape(verdict.upper())}{small}</div>'


def _facts(report: dict[str, Any]) -> str:
    profile, book = report["profile"], report["logbook"]
    rows = (
        ("device", report["device_id"]),
        ("profile", f"{profile['name']} (CRC {profile['crc']})"),
        ("firmware", f"{report['firmware']}, protocol {report['protocol']}"),
        ("by", report["who"]),
        ("begun, ended", f"{report['begun_utc']}, {report['ended_utc']}"),
        ("left", report["left"]),
        (
            "contact's wear",
            f"{book['operations']} closings, {book['hot_openings']} of them opened under load"
            if book
            else "not read",
        ),
    )
    lines = "".join(
        f'<tr><th scope="row">{name}</th><td>{escape(str(said))}</td></tr>' for name, said in rows
    )
    return f'<table class="facts"><tbody>{lines}</tbody></table>'


def _guards(rows: list[dict[str, Any]]) -> str:
    lines = []
    for row in rows:
        notes = [f"{row['reason']}."] if row["reason"] else []
        notes += [f"Shown elsewhere: {row['shown_by']}."] if row["shown_by"] else []
        lines.append(
            f"<tr><td>H{row['hazard']}</td><td>{escape(row['name'])}</td>"
            f"<td>{escape(', '.join(row['steps'])) or 'none'}</td>"
            f"<td>{_result(row['result'])}</td><td>{escape(' '.join(notes))}</td></tr>"
        )
    head = "".join(
        f'<th scope="col">{name}</th>' for name in ("guard", "against", "steps", "result", "note")
    )
    return (
        f'<table class="guards"><thead><tr>{head}</tr></thead><tbody>{"".join(lines)}</tbody>'
        "</table>"
    )


def _step(step: dict[str, Any]) -> str:
    proves = ", ".join(f"H{hazard}" for hazard in step["hazards"])
    asked = "".join(
        f'<p class="asked">Asked of the operator: {escape(t)}</p>' for t in step["asked"]
    )
    reason = f'<p class="reason">{escape(step["reason"])}</p>' if step["reason"] else ""
    return (
        f'<section><h3><span class="id">{escape(step["id"])}</span>{escape(step["title"])}'
        f'<span class="result">{_result(step["result"])}</span></h3>'
        f"<p>{escape(step['does'])}{f' Proves {proves}.' if proves else ''}</p>"
        f"{asked}{reason}{_values(step['values'])}</section>"
    )


def _values(values: list[dict[str, Any]]) -> str:
    if not values:
        return ""
    lines = []
    for content in values:
        value = Value(**{name: given for name, given in content.items() if name != "holds"})
        holds = "holds" if content["holds"] else f'<strong class="{FAILED}">NO</strong>'
        limits = value.limits()
        lines.append(
            f"<tr><td>{escape(value.name)}</td><td>{escape(value.said())}</td>"
            f"<td>{escape(limits)}</td><td>{holds if limits else ''}</td></tr>"
        )
    head = "".join(
        f'<th scope="col">{name}</th>' for name in ("measured or seen", "value", "limits", "")
    )
    return (
        f'<table class="values"><thead><tr>{head}</tr></thead><tbody>{"".join(lines)}</tbody>'
        "</table>"
    )


def _result(result: str) -> str:
    return f'<span class="{escape(result.replace(" ", "-"))}">{escape(result)}</span>'


def _footer(document: dict[str, Any]) -> str:
    seal, signature = document["seal"], document["signature"]
    signed = (
        f"<p>Signed by Ed25519 key <code>{escape(signature['public_key'])}</code></p>"
        if signature
        else "<p>Not signed.</p>"
    )
    return (
        f"<footer><p>Seal <code>{escape(seal['sha256'])}</code></p><p>{escape(seal['of'])}.</p>"
        f"{signed}<p>This page is made from the .json file beside it, which alone is sealed: "
        "<code>kneewise prove --check FILE.json</code>.</p></footer>"
    )
