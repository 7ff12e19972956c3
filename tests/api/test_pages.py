"""The pages as they are served: whole, linked, guarded by their policy, and true to the contract."""

from __future__ import annotations

import json
import re
from collections.abc import Iterator
from html import unescape
from html.parser import HTMLParser
from urllib.parse import unquote, urljoin, urlsplit

import pytest

from assignable.api.operations import documentation
from assignable.spc.charts import CHARTS
from assignable.spc.methods import METHODS
from assignable.web import marked
from assignable.web.reading import Document, laid_out
from assignable.web.trying import FORMS
from contract import served

PAGES = ("/", "/try", "/docs", "/docs/reading", "/methods", "/problems", "/problems/busy", "/verification")
SCRIPTED = {"/", "/try", "/docs"}


class Read(HTMLParser):
    """What a page holds: its links, ids, texts of headings, and whatever a strict policy would stop."""

    def __init__(self, path: str) -> None:
        super().__init__()
        answer = served.app().test_client().get(path)
        assert answer.status_code == 200, path
        self.path = path
        self.policy = answer.headers["Content-Security-Policy"]
        self.links: list[str] = []
        self.ids: list[str] = []
        self.scripts: list[str | None] = []
        self.stopped: list[str] = []
        self.open: list[str] = []
        self.headings: list[str] = []
        self.text = answer.get_data(as_text=True)
        self.feed(self.text)

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        given = dict(attrs)
        self.open.append(tag)
        if tag in ("h1", "h2"):
            self.headings.append("")
        if tag == "script":
            self.scripts.append(given.get("src"))
        if tag == "style" or any(name == "style" or name.startswith("on") for name in given):
            self.stopped.append(tag)
        if "id" in given:
            self.ids.append(given["id"] or "")
        for name in ("href", "src"):
            if given.get(name) and not (given[name] or "").startswith("data:"):
                self.links.append(urljoin(f"http://here{self.path}", given[name]))

    def handle_endtag(self, tag: str) -> None:
        while self.open and self.open.pop() != tag:
            pass

    def handle_data(self, data: str) -> None:
        if {"h1", "h2"} & set(self.open[-1:]):
            self.headings[-1] += data


@pytest.mark.parametrize("path", PAGES)
def test_a_page_keeps_to_its_policy_and_its_links_lead_somewhere(path: str) -> None:
    page = Read(path)
    assert "default-src 'none'" in page.policy
    assert "unsafe" not in page.policy
    assert page.stopped == []
    assert all(source is not None for source in page.scripts)
    assert bool(page.scripts) == (path in SCRIPTED)
    assert ("script-src 'self'" in page.policy) == (path in SCRIPTED)
    assert len(page.ids) == len(set(page.ids))
    client = served.app().test_client()
    for link in dict.fromkeys(page.links):
        found = urlsplit(link)
        assert found.netloc == "here", link
        if found.path.startswith("/docs/reading/") or found.path in ("/v1/verification", "/verification"):
            continue  # read one by one below
        assert client.get(found.path).status_code in (200, 503), link


def test_every_operation_has_a_page_that_answers_what_people_ask() -> None:
    contents = Read("/docs/reading")
    listed = {urlsplit(link).path.rpartition("/")[2] for link in contents.links if "/docs/reading/" in link}
    assert listed == set(served.operations())
    for operation_id, operation in served.operations().items():
        page = Read(f"/docs/reading/{operation_id}")
        assert page.headings == [
            operation.summary,
            "What it is for",
            "What to send",
            "What comes back",
            "What can go wrong",
            "Method and source",
        ]
        assert f"</strong> {operation.path}</code>" in page.text
        assert page.stopped == []
        assert page.scripts == []
        anchors = {urlsplit(link).fragment for link in page.links if urlsplit(link).path == "/methods"}
        assert anchors - {""} <= {method.name for method in METHODS}
        if operation.provenance is not None:
            assert anchors - {""} or "<cite>" in page.text, operation_id
        for link in page.links:
            target = urlsplit(link).path
            if target.startswith("/docs/reading/"):
                assert target.removeprefix("/docs/reading/") in served.operations(), link
    assert served.app().test_client().get("/docs/reading/nothing").status_code == 404


def test_a_reading_tells_every_field_of_the_contract() -> None:
    page = Read("/docs/reading/fitXbarRLimits").text.replace("\u200b", "")
    told = re.sub(r"<[^>]+>", "", page)
    for name, schema in served.request_schema("fitXbarRLimits")["properties"].items():
        assert name in told
        if "description" in schema:
            assert schema["description"].replace("`", "") in told.replace("&#39;", "'").replace("&lt;", "<")
    for failure in ("not-json", "contract-violation", "not-computable", "busy"):
        assert f"problems/{failure}" in page
    assert "Burr, I. W." in told
    for example in served.operations()["fitXbarRLimits"].examples:
        assert example in told


def test_the_reading_of_shapes() -> None:
    """Each kind of field in words, from a document made for it."""
    number = {"type": "number", "format": "double"}
    document = {
        "info": {"version": "1"},
        "tags": [{"name": "T", "description": "t"}],
        "components": {
            "schemas": {
                "Inner": {
                    "type": "object",
                    "description": "Inside.",
                    "required": ["a"],
                    "properties": {"a": {**number, "minimum": 2, "exclusiveMaximum": 10}},
                }
            }
        },
        "paths": {
            "/x": {
                "post": {
                    "operationId": "x",
                    "tags": ["T"],
                    "summary": "X",
                    "description": "Does x.",
                    "requestBody": {
                        "content": {
                            "application/json": {
                                "schema": {
                                    "type": "object",
                                    "properties": {
                                        "rows": {
                                            "type": "array",
                                            "items": {"type": "array", "items": {"type": ["number", "null"]}},
                                        },
                                        "inner": {
                                            "anyOf": [
                                                {"$ref": "#/components/schemas/Inner"},
                                                {"type": "null"},
                                            ]
                                        },
                                        "many": {
                                            "type": "array",
                                            "items": {"$ref": "#/components/schemas/Inner"},
                                            "maxItems": 20000,
                                        },
                                        "word": {"type": "string", "enum": ["one", "two"]},
                                        "large": {"type": "integer", "maximum": 9007199254740991},
                                    },
                                }
                            }
                        }
                    },
                    "responses": {
                        "200": {
                            "content": {
                                "application/json": {"schema": {"$ref": "#/components/schemas/Inner"}}
                            }
                        },
                        "400": {"description": "not-json: No."},
                    },
                }
            }
        },
    }
    found = Document(document, {"not-json": (400, "No.", "Mend."), "other": (400, "", "")}).reading("x")
    assert found is not None
    assert found.sends is not None
    told = {f"{field.parents}{field.name}": (field.kind, field.needed, field.text) for field in found.sends}
    assert told == {
        "rows": ("list of lists of numbers (null is a gap)", False, ""),
        "inner": ("object, or null", False, "Inside."),
        "inner.a": ("number", True, "At least 2, below 10."),
        "many": ("list of objects", False, "No more than 20\u202f000."),
        "many[].a": ("number", True, "At least 2, below 10."),
        "word": ("one of `one`, `two`", False, ""),
        "large": ("whole number", False, ""),
    }
    assert [field.name for field in found.answers] == ["a"]
    assert [failure.code for failure in found.failures] == ["not-json"]


@pytest.mark.parametrize(
    "value", [{}, [], {"a": []}, {"a": [[1, None], [2, 3]], "b": {"c": "é"}}, [{"a": 1}], 1.5, None]
)
def test_laid_out_json_is_the_same_json(value: object) -> None:
    assert json.loads(laid_out(value)) == value


def test_marks_become_code_and_nothing_else_does() -> None:
    assert str(marked("a `b<c` <i>&")) == "a <code>b&lt;c</code> &lt;i&gt;&amp;"


def test_the_methods_page_has_every_method_with_its_sources_and_cases() -> None:
    page = Read("/methods")
    verification = Read("/verification")
    for method in METHODS:
        assert method.name in page.ids
    cases = {urlsplit(link).fragment for link in page.links if urlsplit(link).path == "/verification"} - {""}
    assert len(cases) > 50
    assert cases <= set(verification.ids)
    operations = {urlsplit(link).path.rpartition("/")[2] for link in page.links if "/docs/reading/" in link}
    assert operations <= set(served.operations())


def offered() -> Iterator[tuple[str, str, bool]]:
    for name, attributes in re.findall(r'<option value="([a-z-]+)" (data-forms=[^>]+)>', Read("/try").text):
        (forms,) = re.findall(r'data-forms="([a-z ]+)"', attributes)
        yield name, forms, "data-ruled" in attributes


def test_the_page_for_ones_own_numbers_offers_what_the_contract_takes() -> None:
    found = list(offered())
    assert {name for name, _, _ in found} == set(FORMS) <= set(CHARTS)
    for name, forms, ruled in found:
        shape = served.request_schema(f"fit{CHARTS[name].stem}Limits")["properties"]
        assert ("rules" in shape) == ruled
        (data,) = served.alternatives(shape["data"])
        for form in forms.split():
            wanted = {"subgroups": {"values"}, "singles": {"individuals", "values"}, "counts": {"counts"}}[
                form
            ]
            assert wanted & set(data["properties"]), (name, form)


def test_every_script_is_served_and_imports_only_what_is() -> None:
    edition = re.search(r"docs/assets/([0-9a-f]{16})/", Read("/try").text)
    assert edition
    client = served.app().test_client()
    for name in documentation._SCRIPTS:
        answer = client.get(f"/docs/assets/{edition[1]}/{name}")
        assert answer.status_code == 200
        assert answer.content_type.startswith("text/javascript")
        script = answer.get_data(as_text=True)
        assert set(re.findall(r'from "\./([a-z]+\.js)"', script)) <= set(documentation._SCRIPTS)
        assert "innerHTML" not in script
        assert not re.search(r"https?://", script)


def test_what_draws_shows_its_examples_drawn() -> None:
    drawing = [found for found in served.operations().values() if found.media_type == "image/svg+xml"]
    # One of each kind; the charts' own are alike.
    shown = [found for found in drawing if "/charts/" not in found.path]
    assert len(shown) >= 9
    for operation in shown:
        page = Read(f"/docs/reading/{operation.operation_id}")
        sources = re.findall(r'<img src="data:image/svg\+xml;charset=utf-8,([^"]*)" alt="([^"]+)"', page.text)
        assert len(sources) == len(operation.examples)
        for (source, words), name in zip(sources, operation.examples, strict=True):
            answered = served.call(operation.operation_id, served.example(name)).get_data(as_text=True)
            assert unquote(unescape(source)) == answered
            assert f">{words}</desc>" in answered
        plain = operation.path.removesuffix("/picture")
        (of,) = [found for found in served.operations().values() if found.path == plain]
        assert f'href="{operation.operation_id}"' in Read(f"/docs/reading/{of.operation_id}").text
