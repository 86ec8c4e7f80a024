"""What users write stays text on the pages: no tag, attribute or script comes of it, whatever they write.

The tags of a page with harmful texts are those of the same page with harmless ones. What is said of HTML holds in any
browser; `tests/browser/` looks at the pages in a real one.
"""

from __future__ import annotations

import dataclasses
import html
import json
import re
from collections.abc import Iterator
from functools import cache
from html.parser import HTMLParser
from pathlib import Path
from typing import Any

import pytest
from builders import build_problem
from fronts import STACKS, make_front

from stackopt.build import make_build_sheet
from stackopt.front import Front
from stackopt.outputs.build_page import build_html
from stackopt.outputs.page import page_html
from stackopt.problem import Sheet

MARK = "zqx"
HARMLESS = f"{MARK} a harmless text"
TEXTS = (
    f"{MARK}<script>window.hacked=1</script><img src=x onerror=window.hacked=1>",
    f"{MARK}</script></title></style></textarea></select><svg onload=window.hacked=1>",
    f'{MARK}" onmouseover="window.hacked=1" \' onmouseover=\'window.hacked=1',
    f"{MARK}{{{{ 7 * 7 }}}}{{% raw %}}{{# x #}}`${{window.hacked=1}}` javascript:window.hacked=1",
    f"{MARK}\u2028\u2029]]>--><!--<script>",
    f"{MARK}&lt;b&gt;&#60;b&#62;\\u003cb\\u003e\\x3cb\\x3e\\",
    f"{MARK} $x^{{2$ \\(x\\) 5 $ or 6 $ @stack @{{rank}}{{safe}} $index $swatch:rank @$name",
    f"{MARK} \u4e2d\u6587 \U0001f600 \u0e01\u0e33 \u202e\u0627 $$x$$<img src=x onerror=window.hacked=1>",
)
SVG_TAGS = {"svg", "g", "path", "defs", "use", "clippath", "rect", "style", "metadata", "pattern", "text", "tspan",
            "rdf:rdf", "cc:work", "dc:type", "dc:date", "dc:format", "dc:creator", "cc:agent", "dc:title"}  # fmt: skip


class Tags(HTMLParser):
    """Tags of a page with their attributes, text of its scripts, and all other text."""

    def __init__(self, page: str) -> None:
        super().__init__(convert_charrefs=True)
        self.tags: list[tuple[str, tuple[tuple[str, str | None], ...]]] = []
        self.comments: list[str] = []
        self.scripts: list[str] = []
        self.words: list[str] = []
        self._inside: list[str] = []
        self.feed(page)
        self.close()

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append((tag, tuple(attrs)))
        self._inside.append(tag)

    def handle_endtag(self, tag: str) -> None:
        self._inside.append(f"/{tag}")

    def handle_comment(self, data: str) -> None:
        self.comments.append(data)

    def handle_data(self, data: str) -> None:
        (self.scripts if self._inside[-1:] == ["script"] else self.words).append(data)


def front(text: str) -> Front:
    """A front in which every text that a user writes is the given one."""
    problem = build_problem()
    name = " ".join(text.replace("/", "").split()) or "x"  # what a material may be called
    steel = dataclasses.replace(
        problem.materials["steel"], name=name, notes=text, origin=dict.fromkeys(problem.materials["steel"].origin, text)
    )
    named = [dataclasses.replace(one, name=f"{text} {n}") for n, one in enumerate(problem.requirements)]
    problem = dataclasses.replace(
        problem,
        title=text,
        currency=text,
        materials={**problem.materials, name: steel},
        use=(*problem.use, name),
        requirements=tuple(named),
        remarks=(text,),
        name=text,
        files=(text,),
    )
    made = make_front(problem, [*STACKS, (Sheet(name, 1e-3),)])
    return dataclasses.replace(made, statement=text, equals=((1, made.rows[3]),), alternatives=made.rows)


@cache
def trade_off(text: str) -> str:
    return page_html(front(text), text)


@cache
def build_sheet(text: str) -> str:
    return build_html(make_build_sheet(front(text), 4, (0.12, 0.08), (0.3, 0.2)), text)


def without_ids(tags: Tags) -> list[Any]:
    """Tags with their attributes, but for the ids that the library of the plots makes anew each time."""
    ids = re.compile(r"[0-9a-f]{8}-[0-9a-f-]{27}|p\d{4,}")
    return [(tag, [(name, ids.sub("id", value or "")) for name, value in attrs]) for tag, attrs in tags.tags]


@pytest.mark.parametrize("text", TEXTS)
def test_the_trade_off_page_has_the_same_tags(text: str) -> None:
    tags, plain = Tags(trade_off(text)), Tags(trade_off(HARMLESS))
    assert without_ids(tags) == without_ids(plain)
    assert tags.comments == plain.comments
    assert len(tags.scripts) == len(plain.scripts)
    assert "".join(tags.words).count(MARK) == "".join(plain.words).count(MARK)
    assert "".join(tags.words).count(text) > 3


@pytest.mark.parametrize("text", TEXTS)
def test_the_script_of_the_page_holds_texts_as_data_only(text: str) -> None:
    for script in Tags(trade_off(text)).scripts:
        assert "<!--" not in script or MARK not in script
        for around in re.findall(rf".{{0,40}}{MARK}.{{0,80}}", script):
            assert not re.search(r"[<>\u2028\u2029]", around)
    data = document(trade_off(text))
    assert json.dumps(text)[1:-1] in json.dumps(data)
    for kind, key, value in read_as_code(data):
        assert MARK not in value, f"{key} of {kind} is read as HTML or as a program"


def document(page: str) -> Any:
    """The models of the plots as the page's script will see them."""
    match = re.search(r"const docs_json = '(.*?)';\n", page)
    assert match is not None
    literal = re.sub(r"\\(.)", r"\1", match[1])  # what a string of the script holds
    return json.loads(html.unescape(literal))


def models(data: Any) -> Iterator[dict[str, Any]]:
    if isinstance(data, dict):
        if data.get("type") == "object":
            yield data
        for value in data.values():
            yield from models(value)
    elif isinstance(data, list):
        for value in data:
            yield from models(value)


def read_as_code(data: Any) -> Iterator[tuple[str, str, str]]:
    """What of the models is taken for HTML or for a program: not where data stand beside it."""
    for model in models(data):
        for key in ("text", "tooltips", "code", "label", "stylesheets", "html", "description"):
            value = model.get("attributes", {}).get(key)
            if value is not None and model["name"] in ("Div", "HoverTool", "CustomJS", "Button", "HTML"):
                yield model["name"], key, json.dumps(value)


def test_something_is_read_as_code_at_all() -> None:
    kinds = {(kind, key) for kind, key, _ in read_as_code(document(trade_off(HARMLESS)))}
    assert {("Div", "text"), ("HoverTool", "tooltips"), ("CustomJS", "code")} <= kinds


@pytest.mark.parametrize("text", TEXTS)
def test_the_build_sheet_has_the_same_tags(text: str) -> None:
    """Its pictures apart, in which letters are shapes."""
    pictures = re.compile(r"<svg.*?</svg>", re.DOTALL)
    tags, plain = (Tags(pictures.sub("", build_sheet(one))) for one in (text, HARMLESS))
    assert tags.tags == plain.tags
    assert tags.comments == plain.comments == []
    assert "".join(tags.words).count(MARK) == "".join(plain.words).count(MARK)
    assert "".join(tags.words).count(text) > 5
    assert tags.scripts == []


@pytest.mark.parametrize("text", TEXTS)
def test_the_pictures_of_the_build_sheet_hold_shapes_only(text: str) -> None:
    pictures = re.findall(r"<svg.*?</svg>", build_sheet(text), re.DOTALL)
    assert len(pictures) == 2
    for picture in pictures:
        tags = Tags(picture)
        assert {tag for tag, _ in tags.tags} <= SVG_TAGS
        for tag, attrs in tags.tags:
            assert not [name for name, _ in attrs if name.startswith("on")], tag
            assert all((value or "").startswith("#") for name, value in attrs if name.endswith("href"))
            assert MARK not in str(attrs)
        assert not re.search(r"--|[<>]", "".join(tags.comments))


@pytest.mark.parametrize("text", TEXTS)
def test_no_text_can_leave_a_page_through_its_policy(text: str) -> None:
    """The policy that forbids the network is the first thing in the head, before any text."""
    for page in (trade_off(text), build_sheet(text)):
        policy = page.index("Content-Security-Policy")
        assert page.index("default-src 'none'") < page.index(MARK)
        assert policy < page.index("<title>")


def test_the_templates_mark_nothing_of_users_as_safe() -> None:
    folder = Path(__file__).parent.parent.parent / "stackopt" / "outputs" / "templates"
    safe = {name for path in folder.glob("*.html") for name in re.findall(r"{{ (\w+) \| safe", path.read_text("utf-8"))}
    assert safe == {"body", "script", "bokeh_js", "section_svg", "curves_svg"}
