"""The handbook as pages: what Markdown means, and nothing that could run."""

from __future__ import annotations

import re
from importlib import resources
from typing import Any

import pytest

from softsensor.web.handbook_text import chapter_html

CHAPTERS = sorted(
    file.name.removesuffix(".md")
    for file in resources.files("softsensor.handbook").iterdir()
    if file.name.endswith(".md")
)

CASES = {
    "# A title\ntext": '<h2 id="a-title">A title</h2>\n<p>text</p>',
    "one\ntwo\n\nthree": "<p>one two</p>\n<p>three</p>",
    "text\n- one\n  goes on\n- two": "<p>text</p>\n<ul><li>one goes on</li><li>two</li></ul>",
    "1. one\n2. **two**": "<ol><li>one</li><li><strong>two</strong></li></ol>",
    "```toml\n# <a>\n\n- b\n```\nend": "<pre># &lt;a&gt;\n\n- b</pre>\n<p>end</p>",
    "```\nnever closed": "<pre>never closed</pre>",
    "a `<b> **c**` *d*": "<p>a <code>&lt;b&gt; **c**</code> <em>d</em></p>",
    "2 * 3 * 4": "<p>2 * 3 * 4</p>",
    "[x](javascript:alert(1)) [y](http://a.test)": "<p>[x](javascript:alert(1)) [y](http://a.test)</p>",
    "[x](#here) [y](a.md#b)": '<p><a href="#here">x</a> <a href="/handbook/a#b">y</a></p>',
    "![x\ny](pictures/a-b.png)": '<p><img src="/handbook/pictures/a-b.png" alt="x y"></p>',
    "![x](http://a.test/b.png)": "<p>![x](http://a.test/b.png)</p>",
    "<script>alert(1)</script>": "<p>&lt;script&gt;alert(1)&lt;/script&gt;</p>",
    "": "",
}


@pytest.mark.parametrize("text", CASES)
def test_markdown_becomes_what_it_means(text: str) -> None:
    assert chapter_html(text) == CASES[text]


def test_a_table_has_a_head_and_rows() -> None:
    made = chapter_html("| a | b |\n|---|:-:|\n| `1` | x \\| y |\n")
    assert made.count("<th ") == 2
    assert "<tr><td><code>1</code></td><td>x | y</td></tr>" in made
    assert "---" not in made


@pytest.mark.parametrize("chapter", CHAPTERS)
def test_every_chapter_is_shown_and_its_links_lead_somewhere(asker: Any, chapter: str) -> None:
    answer = asker.get(f"/handbook/{chapter}")
    assert answer.status_code == 200
    body = answer.text.split('<section class="chapter">')[1]
    assert "```" not in body
    assert re.findall(r"^#+ ", body, re.MULTILINE) == []
    for link in re.findall(r'href="([^"#]*)(?:#[^"]*)?"', body):
        assert not link or asker.get(link).status_code == 200
    for picture in re.findall(r'<img src="([^"]*)"', body):
        shown = asker.get(picture)
        assert (shown.status_code, shown.headers["content-type"]) == (200, "image/png")
    for place in re.findall(r'href="#([^"]+)"', body):
        assert f'id="{place}"' in body


@pytest.mark.parametrize("name", ["none.png", "__init__.py", "..%2F11-measured.md"])
def test_nothing_but_the_pictures_is_given_out(asker: Any, name: str) -> None:
    assert asker.get(f"/handbook/pictures/{name}").status_code == 404


def test_the_list_of_chapters_names_them_all(asker: Any) -> None:
    page = asker.get("/handbook").text
    assert CHAPTERS
    assert all(f"/handbook/{chapter}" in page for chapter in CHAPTERS)
