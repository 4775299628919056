"""The pages mention every name of the schema, their links resolve, and their Python runs."""

from __future__ import annotations

import importlib.util
import re
import textwrap
from functools import cache
from pathlib import Path
from types import ModuleType
from typing import Any

import pytest

from realize.files.registry import FORMATS
from realize.schema import CLAIMS, COMMON_FIELDS, EXIT_STATUSES, FORMS, HOLDS, KINDS, VERBS, options_of

ROOT = Path(__file__).resolve().parents[2]
DOCS = ROOT / "docs"
PAGES = sorted(path for path in DOCS.rglob("*.rst") if "_build" not in path.parts)
_GENERATED = re.compile(r"^( *)\.\. generated:: (\S+)$", re.MULTILINE)


@cache
def generator() -> ModuleType:
    """docs/generate.py as a module."""
    spec = importlib.util.spec_from_file_location("docs_generate", DOCS / "generate.py")
    assert spec is not None and spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


def page(name: str) -> str:
    """A page as Sphinx sees it: generated parts in place."""
    source = (DOCS / f"{name}.rst").read_text(encoding="utf-8")
    return _GENERATED.sub(lambda m: textwrap.indent(generator().text_of(m[2]), m[1]), source)


def test_every_generated_part_exists_and_is_used() -> None:
    used = {m[2] for path in PAGES for m in _GENERATED.finditer(path.read_text(encoding="utf-8"))}
    assert used == set(generator().PARTS)


@pytest.mark.parametrize("verb", VERBS.values(), ids=list(VERBS))
def test_the_command_line_page_has_every_verb_and_option(verb: Any) -> None:
    text = page("reference/command-line")
    section = text.partition(f".. _verb-{verb.name}:")[2].partition(".. _verb-")[0]
    assert verb.says in section
    for option in options_of(verb):
        place = section if option in verb.options else text
        assert re.search(rf"``--{option.name}[ `]", place), option.name
        for choice in option.choices:
            assert f"``{choice}``" in place


@pytest.mark.parametrize("kind", KINDS.values(), ids=list(KINDS))
def test_the_page_on_model_files_has_every_kind_and_field(kind: Any) -> None:
    section = page("formats/model-files").partition(f".. _kind-{kind.name}:")[2].partition(".. _kind-")[0]
    assert section
    for field in kind.fields:
        assert f"``{field.name}``" in section
        assert generator().safe(HOLDS[field.holds]) in section


def test_the_page_on_model_files_has_the_common_fields_and_the_formats() -> None:
    text = page("formats/model-files")
    for name in COMMON_FIELDS:
        assert f"``{name}``" in text
    for row in FORMATS.values():
        for suffix in row.suffixes:
            assert f"``{suffix}``" in text


@pytest.mark.parametrize("name", CLAIMS)
def test_claims_are_listed_and_defined(name: str) -> None:
    assert f"``{name}``" in page("reference/claims")
    definitions = page("methods/claims").partition("Definitions\n")[2].partition("How a claim is proved")[0]
    assert f"`{name}`" in definitions


@pytest.mark.parametrize("form", FORMS)
def test_every_form_has_a_page(form: str) -> None:
    assert any(f"--form {form}" in path.read_text(encoding="utf-8") for path in (DOCS / "methods").glob("*.rst"))


def test_exit_statuses_are_listed() -> None:
    text = page("reference/exit-statuses")
    readme = (ROOT / "README.md").read_text(encoding="utf-8")
    for code, meaning in EXIT_STATUSES.items():
        assert generator().safe(meaning) in text
        assert f"| {code} | {meaning} |" in readme


def test_there_are_ten_worked_examples() -> None:
    examples = page("methods/claims").partition("Ten worked examples")[2]
    assert [int(k) for k in re.findall(r"^\*\*(\d+)\. ", examples, re.MULTILINE)] == list(range(1, 11))


@pytest.mark.parametrize("path", PAGES, ids=lambda path: path.relative_to(DOCS).as_posix())
def test_links_between_pages_resolve(path: Path) -> None:
    source = path.read_text(encoding="utf-8")
    targets = [target.rpartition("<")[2].rstrip(">") for target in re.findall(r":doc:`([^`]+)`", source)]
    for block in re.findall(r"\.\. toctree::\n((?: +.*\n|\n)+)", source):
        targets += [line.strip() for line in block.splitlines() if line.strip() and not line.strip().startswith(":")]
    for target in targets:
        place = DOCS / target.lstrip("/") if target.startswith("/") else path.parent / target
        assert place.with_name(place.name + ".rst").is_file(), target


def test_every_page_is_in_a_table_of_contents() -> None:
    listed = {DOCS / "index.rst"}
    for path in PAGES:
        for block in re.findall(r"\.\. toctree::\n((?: +.*\n|\n)+)", path.read_text(encoding="utf-8")):
            listed |= {path.parent / f"{line.strip()}.rst" for line in block.splitlines() if line.strip()}
    assert set(PAGES) <= listed


def _commands(path: Path) -> list[list[str]]:
    import shlex

    lines: list[str] = []
    text = path.read_text(encoding="utf-8")
    for block in re.findall(r"\.\. code-block:: sh\n\n((?: {3}.*\n|\n)+)", text):
        lines += block.splitlines()
    for block in re.findall(r"```sh\n(.*?)```", text, re.DOTALL):
        lines += block.splitlines()
    found = []
    for line in lines:
        for part in re.split(r"[|>]|&&", line):
            words = shlex.split(part)
            if words and words[0].endswith("realize") and len(words) > 1:
                found.append(words[1:])
    return found


@pytest.mark.parametrize("path", [*PAGES, ROOT / "README.md", ROOT / "DEVELOPERS.md"], ids=lambda path: path.name)
def test_commands_on_pages_are_spelled_right(path: Path) -> None:
    from realize.commands.build import build_app

    for words in _commands(path):
        if words[0] not in VERBS:
            assert words[0].startswith("--") or words == ["VERB", "--help"], words
            continue
        command = build_app(words).commands[words[0]]
        command.make_context(words[0], list(words[1:]))


def _python(path: Path) -> str:
    text = path.read_text(encoding="utf-8")
    blocks = re.findall(r"\.\. code-block:: python\n\n((?: {3}.*\n|\n)+)", text)
    blocks += re.findall(r"```python\n(.*?)```", text, re.DOTALL)
    return "\n".join(textwrap.dedent(block) for block in blocks)


WITH_PYTHON = [path for path in [*PAGES, ROOT / "README.md"] if _python(path)]


@pytest.mark.parametrize("path", WITH_PYTHON, ids=lambda path: path.name)
def test_python_on_pages_runs(path: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    exec(compile(_python(path), str(path), "exec"), {"__name__": "page"})


def test_json_on_pages_reads(tmp_path: Path) -> None:
    import realize

    found = 0
    for path in PAGES:
        for block in re.findall(r"\.\. code-block:: json\n\n((?: {3}.*\n|\n)+)", path.read_text(encoding="utf-8")):
            if '"realize"' in block:
                file = tmp_path / f"{found}.json"
                file.write_text(block, encoding="utf-8")
                assert realize.read(file).kind == re.search(r'"kind": "([a-z-]+)"', block)[1]
                found += 1
    assert found >= 2
