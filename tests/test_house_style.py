"""A house style: blocks are overridden, the page stays closed, and a fault names file and line."""

from __future__ import annotations

import base64
import hashlib
import re
from html.parser import HTMLParser
from pathlib import Path

import pytest
from skytally import house_style
from skytally.campaign import ReportText
from skytally.errors import InputError
from skytally.house_style import HouseStyle
from skytally.report import render_html
from small_results import small_results
from typer.testing import CliRunner

BEGIN = '{% extends "skytally/report.html.j2" %}\n'
BLOCKS = (
    *("title", "style", "masthead", "summary", "sky", "maps", "telescopes", "between", "time"),
    *("depth", "distance", "findings", "logs", "provenance", "limits", "footer"),
)


def folder(tmp_path: Path, **files: str) -> Path:
    """A folder of templates; underscores stand for dots in the names."""
    style = tmp_path / "style"
    style.mkdir()
    for name, text in files.items():
        (style / name.replace("_", ".")).write_text(text, encoding="utf-8")
    return style


def page(tmp_path: Path, body: str, **files: str) -> str:
    style = HouseStyle.read(folder(tmp_path, report_html_j2=BEGIN + body, **files))
    return render_html(small_results(), {}, style)


def fault(tmp_path: Path, body: str, **files: str) -> str:
    with pytest.raises(InputError) as caught:
        page(tmp_path, body, **files)
    assert caught.value.exit_code == 2
    return str(caught.value)


class _Head(HTMLParser):
    """The policy and the style of a page, as a browser would find them."""

    def __init__(self, text: str) -> None:
        super().__init__()
        self.policy, self.style, self._inside = "", "", False
        self.feed(text)

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        found = dict(attrs)
        if found.get("http-equiv") == "Content-Security-Policy":
            self.policy = found["content"] or ""
        self._inside = tag == "style"

    def handle_endtag(self, tag: str) -> None:
        self._inside = False

    def handle_data(self, data: str) -> None:
        if self._inside:
            self.style += data


@pytest.mark.parametrize("block", BLOCKS)
def test_each_block_can_be_replaced_and_extended(tmp_path: Path, block: str) -> None:
    ours = render_html(small_results(), {})
    theirs = page(tmp_path, f"{{% block {block} %}}Quenna{{% endblock %}}")
    more = page(tmp_path / "more", f"{{% block {block} %}}{{{{ super() }}}}Quenna{{% endblock %}}")
    assert theirs.count("Quenna") == more.count("Quenna") == 1
    # Less our block, more theirs; but for the digest of the style, nothing else changes.
    plain = re.compile(r"sha256-[^']+'|\s+")
    shortened, longer, whole = (plain.sub("", text) for text in (theirs, more, ours))
    before, after = shortened.split("Quenna")
    assert whole.startswith(before)
    assert whole.endswith(after)
    assert longer.replace("Quenna", "") == whole


@pytest.fixture(autouse=True)
def _folders(tmp_path: Path) -> None:
    (tmp_path / "more").mkdir()


def test_the_policy_allows_the_style_that_is_there_and_no_other(tmp_path: Path) -> None:
    text = page(tmp_path, "{% block style %}{{ super() }}\nh1 { color: #7a1f3d }{% endblock %}")
    head = _Head(text)
    assert head.style.rstrip().endswith("h1 { color: #7a1f3d }")
    # Content Security Policy Level 3, section 2.3.1: base64 of the SHA-256 of the element's text.
    digest = base64.b64encode(hashlib.sha256(head.style.encode()).digest()).decode()
    assert f"style-src 'sha256-{digest}'" in head.policy
    assert "default-src 'none'" in head.policy
    assert "unsafe" not in head.policy


def test_the_example_of_the_developers_guide_works(tmp_path: Path) -> None:
    guide = (Path(__file__).parents[1] / "DEVELOPERS.md").read_text(encoding="utf-8")
    [example] = re.findall(r"```jinja\n(.*?)```", guide, re.DOTALL)
    style = HouseStyle.read(folder(tmp_path, report_html_j2=example))
    text = render_html(small_results(), {}, style)
    assert "<p>Night desk of the Quenna follow-up, on Lantern 7.</p>" in text
    assert "h1 { color: #7a1f3d }" in text
    named = guide[guide.index("**a house style.**") :]
    assert all(f"`{block}`" in named for block in BLOCKS)


def test_data_is_escaped_and_the_words_are_ours(tmp_path: Path) -> None:
    body = (
        "{% block summary %}{{ '<script>' }}|{{ count('telescope', 1) }}|{{ 0.5 | percent }}|"
        "{{ results.row(telescope='Heron').exposures }}|{% for t in results.telescopes %}"
        "{{ loop.index }}{{ t.name.upper() }} {% endfor %}|{% include 'own.txt' %}{% endblock %}"
    )
    text = page(tmp_path, body, own_txt="Kettle Down").replace("\N{NO-BREAK SPACE}", " ")
    assert "&lt;script&gt;|1 telescope|50.0 %|2|1HERON 2PLOVER |Kettle Down" in text
    assert "<script>" not in text


def test_the_report_is_signed(tmp_path: Path) -> None:
    signed = small_results(report=ReportText(("A. <b>", "B. Observer"), ("Quenna",), "We thank."))
    text = render_html(signed, {})
    assert "A. &lt;b&gt;, B. Observer" in text
    assert '<p class="closing">We thank.</p>' in text


@pytest.mark.parametrize(
    ("body", "line", "words"),
    [
        ("\n{% block limits %}{% if %}{% endblock %}", 3, "Expected an expression"),
        ("{% block limits %}\n\n{{ nosuch }}{% endblock %}", 4, "'nosuch' is undefined"),
        ("{% block limits %}{{ 1 | nosuch }}{% endblock %}", 2, "No filter named 'nosuch'"),
        ("{% block limits %}\n{{ 1 / 0 }}{% endblock %}", 3, "ZeroDivisionError"),
        ("{% block limits %}\n{{ results.row('9') }}{% endblock %}", 3, "KeyError"),
        ("{% block limits %}\n{{ table(1, 2) }}{% endblock %}", 3, "no attribute"),
        ("\n{% block limit %}{% endblock %}", 3, "no block 'limit'; the nearest is 'limits'"),
        ("{% block qqq %}{% endblock %}", 2, "no block 'qqq'; it has"),
        ("{% block limits %}\n{% include 'a.txt' %}{% endblock %}", 3, "no template 'a.txt'"),
        ("{% block limits %}{% include '/etc/hosts' %}{% endblock %}", 2, "does not lie in"),
        ("{% block limits %}{% include '../hosts' %}{% endblock %}", 2, "does not lie in"),
        ("{% block limits %}{% include 'skytally/../a' %}{% endblock %}", 2, "does not lie in"),
        ("{% block limits %}{{ count.__globals__ }}{% endblock %}", 2, "unsafe"),
        ("{% block limits %}{{ results.__class__ }}{% endblock %}", 2, "unsafe"),
        ("{% block limits %}{{ '{0.__class__}'.format(1) }}{% endblock %}", 2, "unsafe"),
        ("{% block limits %}{{ results['__dict__'] }}{% endblock %}", 2, "unsafe"),
        (
            "{% block limits %}{{ results.maps | map(attribute='__doc__') | join }}{% endblock %}",
            2,
            "unsafe",
        ),
    ],
)
def test_a_fault_names_file_and_line(tmp_path: Path, body: str, line: int, words: str) -> None:
    text = fault(tmp_path, body)
    assert f"{tmp_path}/style/report.html.j2: line {line}: " in text
    assert words in text


def test_a_fault_in_another_file_of_the_folder_names_that(tmp_path: Path) -> None:
    body = "{% block limits %}{% include 'own.txt' %}{% endblock %}"
    assert "own.txt: line 2: 'x' is undefined" in fault(tmp_path, body, own_txt="\n{{ x }}")


def test_an_array_cannot_write_itself_to_a_file(tmp_path: Path) -> None:
    leak = tmp_path / "leak"
    body = (
        f"{{% block limits %}}{{{{ results.sky.maps[0].starts.tofile('{leak}') }}}}{{% endblock %}}"
    )
    assert "unsafe" in fault(tmp_path, body)
    assert not leak.exists()


@pytest.mark.parametrize(
    "body",
    [
        "{% for a in range(99999) %}{% for b in range(99999) %}{% endfor %}{% endfor %}",
        "{% macro f(n) %}{% if n %}{{ f(n - 1) }}{{ f(n - 1) }}{% endif %}{% endmacro %}"
        "{{ f(40) }}",
    ],
)
def test_what_would_not_end_is_ended(
    tmp_path: Path, body: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(house_style, "STEP_LIMIT", 20_000)
    text = fault(tmp_path, f"{{% block limits %}}{body}{{% endblock %}}")
    assert "line 2: the template takes more than 20,000 steps" in text


def test_templates_that_call_themselves_are_ended(tmp_path: Path) -> None:
    text = fault(
        tmp_path,
        "{% block limits %}{% macro f() %}{{ f() }}{% endmacro %}{{ f() }}{% endblock %}",
    )
    assert "line 2: templates or macros call one another without end" in text


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("<p>Quenna</p>", "line 1: it must begin with"),
        ('{% extends "report.html.j2" %}', "line 1: it extends itself"),
        ('\n{% extends "base.j2" %}', "line 2: there is no template 'base.j2'"),
        ('{% extends "own.txt" %}', "line 1: own.txt must begin with"),
    ],
)
def test_the_report_is_always_built_on_ours(tmp_path: Path, text: str, words: str) -> None:
    with pytest.raises(InputError, match=re.escape(words)):
        HouseStyle.read(folder(tmp_path, report_html_j2=text, own_txt="Quenna"))


def test_a_base_of_the_folder_may_stand_between(tmp_path: Path) -> None:
    base = BEGIN + "{% block footer %}{% block desk %}Ours{% endblock %}{% endblock %}"
    top = '{% extends "base.txt" %}{% block desk %}Quenna{% endblock %}'
    style = HouseStyle.read(folder(tmp_path, report_html_j2=top, base_txt=base))
    text = render_html(small_results(), {}, style)
    assert "Quenna" in text
    assert "Ours" not in text


def test_files_outside_are_not_read_by_a_link_nor_anything_but_text(tmp_path: Path) -> None:
    (tmp_path / "secret.txt").write_text("secret")
    body = "{% block limits %}{% include 'a.txt' %}{% endblock %}"
    style = folder(tmp_path, report_html_j2=BEGIN + body)
    (style / "a.txt").symlink_to(tmp_path / "secret.txt")
    with pytest.raises(InputError, match=r"a\.txt: it is no file inside the folder"):
        render_html(small_results(), {}, HouseStyle.read(style))
    (style / "a.txt").unlink()
    (style / "a.txt").write_bytes(b"one\ntwo \xff")
    with pytest.raises(InputError, match=r"a\.txt: line 2: the template is not UTF-8"):
        render_html(small_results(), {}, HouseStyle.read(style))
    (style / "a.txt").write_bytes(b" " * (house_style.SIZE_LIMIT_BYTES + 1))
    with pytest.raises(InputError, match=r"a\.txt: the template is larger than 1024 KiB"):
        render_html(small_results(), {}, HouseStyle.read(style))


def test_the_command_ends_with_two_and_writes_nothing(tmp_path: Path) -> None:
    from skytally.cli import app

    broken = folder(tmp_path, report_html_j2=BEGIN + "\n{% block limit %}{% endblock %}")
    for style, words in (
        (tmp_path / "nowhere", "nowhere: there is no folder of that name"),
        (tmp_path / "more", "more: the folder holds no report.html.j2"),
        (broken, "report.html.j2: line 3: skytally/report.html.j2 has no block 'limit'"),
    ):
        # The campaign is not even looked for.
        ask = ["report", "none.toml", "--out", str(tmp_path / "out"), "--templates", str(style)]
        ended = CliRunner().invoke(app, ask)
        assert ended.exit_code == 2
        assert words in ended.stderr
        assert not (tmp_path / "out").exists()
