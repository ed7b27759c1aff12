"""The documentation page, written from the app's own OpenAPI document: one page of HTML that fetches nothing."""

from __future__ import annotations

from html import escape
from typing import Any

_STYLE = """
body{font:16px/1.5 system-ui,sans-serif;margin:2rem auto;max-width:60rem;padding:0 1rem;color:#1c2733}
h1{margin-bottom:0} h2{margin-top:2.5rem;border-bottom:1px solid #ccd5dd}
details{border:1px solid #ccd5dd;border-radius:6px;margin:.5rem 0;padding:.4rem .8rem}
summary{cursor:pointer} code{font:14px ui-monospace,monospace} table{border-collapse:collapse;width:100%}
td,th{border-top:1px solid #e3e9ee;padding:.25rem .5rem;text-align:left;vertical-align:top}
.verb{display:inline-block;min-width:4rem;font-weight:700}
"""


def page(document: dict[str, Any]) -> str:
    """The whole page as HTML."""
    info = document["info"]
    by_tag: dict[str, list[str]] = {}
    for path, verbs in document["paths"].items():
        for verb, operation in verbs.items():
            tag = (operation.get("tags") or ["service"])[0]
            by_tag.setdefault(tag, []).append(_operation(path, verb, operation))
    sections = "".join(f"<h2>{escape(tag)}</h2>{''.join(rows)}" for tag, rows in by_tag.items())
    schemas = document.get("components", {}).get("schemas", {})
    shapes = "".join(_schema(name, schema) for name, schema in sorted(schemas.items()))
    return (
        f'<!doctype html><html lang="en"><head><meta charset="utf-8"><title>{escape(info["title"])}</title>'
        f"<style>{_STYLE}</style></head><body><h1>{escape(info['title'])}</h1>"
        f"<p>Version {escape(info['version'])}. {escape(info.get('description', ''))} "
        'The same as a machine reads it: <a href="/openapi.json">/openapi.json</a>.</p>'
        f"{sections}<h2>documents</h2>{shapes}</body></html>"
    )


def _operation(path: str, verb: str, operation: dict[str, Any]) -> str:
    parameters = "".join(
        f"<tr><td><code>{escape(p['name'])}</code> ({escape(p['in'])})</td>"
        f"<td>{_type(p.get('schema', {}))}{' required' if p.get('required') else ''}</td></tr>"
        for p in operation.get("parameters", [])
    )
    body = _content(operation.get("requestBody", {}))
    replies = "".join(
        f"<tr><td>{escape(status)}</td><td>{escape(reply.get('description', ''))} {_content(reply)}</td></tr>"
        for status, reply in operation.get("responses", {}).items()
    )
    return (
        f'<details id="{escape(operation["operationId"])}"><summary><span class="verb">{verb.upper()}</span> '
        f"<code>{escape(path)}</code> {escape(operation.get('summary', ''))}</summary>"
        f"<p>{escape(operation.get('description', ''))}</p>"
        f"{'<table>' + parameters + '</table>' if parameters else ''}"
        f"{'<p>Body: ' + body + '</p>' if body else ''}<table>{replies}</table></details>"
    )


def _content(holder: dict[str, Any]) -> str:
    return ", ".join(_type(media.get("schema", {})) for media in holder.get("content", {}).values() if media)


def _schema(name: str, schema: dict[str, Any]) -> str:
    required = set(schema.get("required", []))
    rows = "".join(
        f"<tr><td><code>{escape(field)}</code>{'' if field in required else ' (optional)'}</td>"
        f"<td>{_type(shape)} {escape(str(shape.get('description', '')))}</td></tr>"
        for field, shape in schema.get("properties", {}).items()
    )
    values = ", ".join(f"<code>{escape(str(v))}</code>" for v in schema.get("enum", []))
    return (
        f'<details id="schema-{escape(name)}"><summary><code>{escape(name)}</code></summary>'
        f"<p>{escape(schema.get('description', ''))}</p>{values}<table>{rows}</table></details>"
    )


def _type(shape: dict[str, Any]) -> str:
    if "$ref" in shape:
        name = shape["$ref"].rsplit("/", 1)[-1]
        return f'<a href="#schema-{escape(name)}">{escape(name)}</a>'
    for union in ("anyOf", "oneOf", "allOf"):
        if union in shape:
            return " or ".join(_type(part) for part in shape[union])
    if "enum" in shape or "const" in shape:
        values = shape.get("enum", [shape.get("const")])
        return " or ".join(f"<code>{escape(str(v))}</code>" for v in values)
    kind = str(shape.get("type", "any"))
    if kind == "array":
        return f"array of {_type(shape.get('items', {}))}"
    bounds = [
        f"{word} {shape[key]}"
        for key, word in (
            ("minimum", "at least"),
            ("exclusiveMinimum", "above"),
            ("maximum", "at most"),
            ("exclusiveMaximum", "below"),
        )
        if key in shape
    ]
    return escape(kind + (f" ({', '.join(bounds)})" if bounds else ""))
