"""The handbook's chapters as pages: as much of Markdown as they use, everything escaped first.

Headings, paragraphs, lists of one level, fenced code, tables, and within a line code, bold, italics, pictures of
the handbook's own and links to chapters and headings. Anything else is shown as it is written.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Iterator

from markupsafe import Markup, escape

_HEADING = re.compile(r"(#{1,4}) +(.+)")
_ITEM = re.compile(r"(-|\d+\.) +(.*)")
_RULE = re.compile(r"\|[\s:|-]+\|?\s*")
_CODE = re.compile(r"`([^`]+)`")
_LINK = re.compile(r"\[([^\]]+)\]\(([a-z0-9-]+\.md)?(#[a-z0-9-]+)?\)")
_PICTURE = re.compile(r"!\[([^\]]+)\]\((pictures/[a-z0-9-]+\.png)\)")
_BOLD = re.compile(r"\*\*([^*]+)\*\*")
_ITALIC = re.compile(r"\*([^*\s](?:[^*]*[^*\s])?)\*")


def anchor(heading: str) -> str:
    """What a link to a heading calls it.

    >>> anchor("1. What it is, and is not")
    '1-what-it-is-and-is-not'
    """
    return re.sub(r"[^a-z0-9 -]", "", heading.lower()).strip().replace(" ", "-")


def inline(text: str) -> str:
    """One stretch of text as HTML; what stands in backquotes is left alone.

    >>> inline("`a*b*` is *not* <b>, see [chapter 4](04-method.md)")
    '<code>a*b*</code> is <em>not</em> &lt;b&gt;, see <a href="/handbook/04-method">chapter 4</a>'
    """
    parts = _CODE.split(str(escape(text)))
    return "".join(f"<code>{part}</code>" if i % 2 else _marked(part) for i, part in enumerate(parts))


def _marked(part: str) -> str:
    part = _LINK.sub(_link, _PICTURE.sub(r'<img src="/handbook/\2" alt="\1">', part))
    return _ITALIC.sub(r"<em>\1</em>", _BOLD.sub(r"<strong>\1</strong>", part))


def _link(found: re.Match[str]) -> str:
    words, file, place = found[1], found[2], found[3]
    if file is None and place is None:
        return found[0]
    page = f"/handbook/{file.removesuffix('.md')}" if file else ""
    return f'<a href="{page}{place or ""}">{words}</a>'


def _paragraph(lines: list[str]) -> str:
    return f"<p>{inline(' '.join(lines))}</p>"


def _list(lines: list[str]) -> str:
    items: list[list[str]] = []
    for line in lines:
        found = _ITEM.match(line)
        if found:
            items.append([found[2]])
        else:
            items[-1].append(line.strip())
    kind = "ul" if lines[0].startswith("-") else "ol"
    filled = "".join(f"<li>{inline(' '.join(item))}</li>" for item in items)
    return f"<{kind}>{filled}</{kind}>"


def _table(lines: list[str]) -> str:
    rows = [[cell.strip() for cell in re.split(r"(?<!\\)\|", line.strip().strip("|"))] for line in lines]
    head = "".join(f'<th scope="col">{inline(cell)}</th>' for cell in rows[0])
    body = [
        "".join(f"<td>{inline(cell.replace(chr(92) + '|', '|'))}</td>" for cell in row)
        for row, line in zip(rows[1:], lines[1:], strict=True)
        if not _RULE.fullmatch(line)
    ]
    filled = "".join(f"<tr>{row}</tr>" for row in body)
    return f'<div class="scroll"><table><thead><tr>{head}</tr></thead><tbody>{filled}</tbody></table></div>'


def _blocks(text: str) -> Iterator[tuple[Callable[[list[str]], str], list[str]]]:
    """The chapter cut into paragraphs, lists, tables, headings and code, each with what makes HTML of it."""
    kind: Callable[[list[str]], str] = _paragraph
    lines: list[str] = []
    fenced = False
    for line in text.splitlines():
        if fenced or line.startswith("```"):
            if fenced and line.startswith("```"):
                yield _code, lines
                kind, lines, fenced = _paragraph, [], False
            elif fenced:
                lines.append(line)
            else:
                if lines:
                    yield kind, lines
                lines, fenced = [], True
            continue
        starts = _kind_of(line)
        if lines and (not line.strip() or (starts is not _paragraph and starts is not kind)):
            yield kind, lines
            lines = []
        if line.strip():
            kind = kind if lines else starts
            lines.append(line)
            if kind is _heading:
                yield kind, lines
                lines = []
    if fenced or lines:
        yield _code if fenced else kind, lines


def _kind_of(line: str) -> Callable[[list[str]], str]:
    if _HEADING.fullmatch(line):
        return _heading
    if line.startswith("|"):
        return _table
    return _list if _ITEM.match(line) else _paragraph


def _heading(lines: list[str]) -> str:
    found = _HEADING.fullmatch(lines[0])
    assert found is not None
    level = len(found[1]) + 1
    return f'<h{level} id="{anchor(found[2])}">{inline(found[2])}</h{level}>'


def _code(lines: list[str]) -> str:
    return f"<pre>{escape(chr(10).join(lines))}</pre>"


def chapter_html(text: str) -> Markup:
    """A chapter as HTML; its own title becomes a heading of the second level."""
    return Markup("\n".join(make(lines) for make, lines in _blocks(text)))
