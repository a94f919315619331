"""Links, YAML and commands of the documentation hold."""

from __future__ import annotations

import importlib.util
import io
import json
import re
import shlex
from pathlib import Path
from types import ModuleType

import openpyxl
import pytest
from pydantic import TypeAdapter, ValidationError
from ruamel.yaml import YAML

import stresskit
from stresskit.spec.load import load_import, load_scenario, load_study
from stresskit.spec.study import Study
from tests.docs.markdown import ROOT, Block, anchors, blocks, links, pages, prose

README = ROOT / "README.md"
DEMO_LINE = "python3 -m venv .venv && .venv/bin/pip install -q -c constraints.txt . && .venv/bin/stresskit demo --out harbour-demo"
TEST_LINE = "python3 -m venv .venv-test && .venv-test/bin/pip install -q -c constraints.txt -e '.[test]' && .venv-test/bin/python -m pytest"
ALL_BLOCKS = [b for page in pages() for b in blocks(page)]
MARKED = [b for b in ALL_BLOCKS if b.complete]


def page_id(page: Path) -> str:
    return page.relative_to(ROOT).as_posix()


@pytest.mark.parametrize("page", pages(), ids=page_id)
def test_links_resolve(page: Path) -> None:
    dead = []
    for target in links(page):
        if re.match(r"^(https?|mailto):", target):
            continue
        name, _, fragment = target.partition("#")
        there = (page.parent / name).resolve() if name else page
        if not there.exists() or (fragment and fragment not in anchors(there)):
            dead.append(target)
    assert dead == []


def test_every_page_is_reachable_from_the_index() -> None:
    linked = {(ROOT / "docs" / t.partition("#")[0]).resolve() for t in links(ROOT / "docs" / "index.md")}
    assert set((ROOT / "docs").rglob("*.md")) - {ROOT / "docs" / "index.md"} - linked == set()


@pytest.mark.parametrize("page", pages(), ids=page_id)
def test_files_named_in_code_style_exist(page: Path) -> None:
    """`stresskit/...`, `tests/...`, `docs/...`, `scenarios/...` in running text name things that are there."""
    text = "\n".join(line for line in page.read_text(encoding="utf-8").splitlines())
    names = re.findall(r"`((?:stresskit|tests|docs|scenarios)/[\w./*-]*)`", text)
    assert [n for n in names if "*" not in n and not (ROOT / n).exists()] == []


def test_there_are_complete_examples_of_every_kind() -> None:
    kinds = [(b.complete, b.text) for b in MARKED if b.page == README]
    studies = [text for kind, text in kinds if kind == "study"]
    assert any("layout: panel" in s for s in studies)
    assert any("layout: spells" in s for s in studies)
    assert any(kind == "scenario" for kind, _ in kinds)


@pytest.mark.parametrize("block", MARKED, ids=lambda b: b.name)
def test_complete_yaml_is_valid(block: Block, tmp_path: Path) -> None:
    assert block.language == "yaml"
    file = tmp_path / f"{block.complete}.yaml"
    file.write_text(block.text, encoding="utf-8")
    load = {"study": load_study, "scenario": load_scenario, "import": load_import}[block.complete]
    assert getattr(load(file).model, block.complete.replace("import", "import_"))


def test_yaml_that_looks_whole_is_marked() -> None:
    """A block that begins like a file but is not checked would rot."""
    loose = [
        b.name
        for b in ALL_BLOCKS
        if b.language == "yaml" and re.match(r"(study|scenario|import): ", b.text) and not b.complete
    ]
    assert loose == []


def test_the_two_command_lines_of_the_readme() -> None:
    text = README.read_text(encoding="utf-8")
    assert f"\n```\n{DEMO_LINE}\n```\n" in text
    assert f"\n<!-- test-command -->\n```\n{TEST_LINE}\n```\n<!-- /test-command -->\n" in text


def test_the_line_that_ci_takes_out_of_the_readme_is_the_test_command() -> None:
    """The same extraction as in .ci/run."""
    inside, kept = False, []
    for line in README.read_text(encoding="utf-8").splitlines():
        if "<!-- test-command -->" in line:
            inside = True
        if inside and "<!--" not in line and "```" not in line:
            kept.append(line)
        if "<!-- /test-command -->" in line:
            inside = False
    assert kept == [TEST_LINE]


def test_commands_in_the_pages_are_commands_of_the_program() -> None:
    from stresskit.cli import app

    known = {name for name in app if not name.startswith("-")}
    used = set()
    for block in ALL_BLOCKS:
        for line in block.text.splitlines() if block.language in ("", "sh", "console") else ():
            words = shlex.split(line, comments=True) if line.startswith("stresskit ") else []
            used |= {words[1]} if len(words) > 1 and not words[1].startswith("-") else set()
    assert used >= {"check", "run"}
    assert used <= known


def script(name: str) -> ModuleType:
    """A script of docs/ as a module."""
    spec = importlib.util.spec_from_file_location(name, ROOT / "docs" / f"{name}.py")
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


@pytest.mark.parametrize(
    "name", ["make_reference", "make_errors", "make_library", "make_commands", "make_api"]
)
def test_generated_pages_are_up_to_date(name: str) -> None:
    module = script(name)
    assert module.PAGE.read_text(encoding="utf-8") == module.page(), f"run docs/{name}.py"


def test_codes_listed_by_hand_are_codes_of_the_program() -> None:
    source = "\n".join(f.read_text(encoding="utf-8") for f in sorted((ROOT / "stresskit").rglob("*.py")))
    module = script("make_errors")
    listed = [c for c in {**module.OTHER_CODES, **module.LEFT_CODES} if " " not in c]
    assert [code for code in listed if not re.search(rf"""["']{code}["':]""", source)] == []


def fragments() -> list[Block]:
    """Parts of a study: YAML blocks that are no whole file and begin with keys of one."""
    out = []
    for block in ALL_BLOCKS:
        if block.language != "yaml" or block.complete:
            continue
        loaded = YAML(typ="safe", pure=True).load(block.text)
        if isinstance(loaded, dict) and set(loaded) <= set(Study.model_fields):
            out.append(block)
    return out


@pytest.mark.parametrize("block", fragments(), ids=lambda b: b.name)
def test_parts_of_a_study_are_valid_by_themselves(block: Block) -> None:
    """Each section says something that its model takes. What other sections must declare is not looked at."""
    for key, value in YAML(typ="safe", pure=True).load(block.text).items():
        field = Study.model_fields[key]
        adapter = TypeAdapter(field.rebuild_annotation())
        assert wrong_with(adapter, value) == []


def wrong_with(adapter: TypeAdapter[object], value: object) -> list[object]:
    """What the model refuses, besides what a part leaves out because its page does not speak of it."""
    try:
        # JSON, because the models are strict and text has no tuples
        adapter.validate_json(json.dumps(value, default=str))
    except ValidationError as error:
        return [e for e in error.errors() if e["type"] != "missing"]
    return []


def test_every_yaml_block_is_yaml() -> None:
    for block in ALL_BLOCKS:
        if block.language == "yaml":
            assert YAML(typ="safe", pure=True).load(block.text) is not None, block.name


def test_every_key_has_a_meaning() -> None:
    assert script("make_reference").undescribed() == []


def test_exported_names_are_those_the_docs_list() -> None:
    listed = set()
    for block in ALL_BLOCKS:
        listed |= set(re.findall(r"\bsk\.(\w+)", block.text)) if block.language == "python" else set()
    page = (ROOT / "docs" / "python.md").read_text(encoding="utf-8")
    listed_in_table = set(re.findall(r"^\| `sk\.(\w+)", page, re.MULTILINE))
    assert listed_in_table == set(stresskit.__all__)
    assert listed <= set(stresskit.__all__)
    for name in stresskit.__all__:
        assert getattr(stresskit, name) is not None


def test_sources_cited_in_square_brackets_are_in_the_references() -> None:
    references = (ROOT / "docs" / "references.md").read_text(encoding="utf-8")
    cited = set()
    for page in pages():
        for line in prose(page):
            for group in re.findall(r"\[([^\]]*\b(?:19|20)\d\d[^\]]*)\](?!\()", line):
                cited |= {part.strip() for part in group.split(";")}
    missing = []
    for source in cited:
        author = re.match(r"\w+", source)
        year = re.search(r"\b(?:19|20)\d\d\b", source)
        assert author, source
        assert year, source
        if not re.search(rf"^{author[0]}, .*\({year[0]}\)", references, re.MULTILINE):
            missing.append(source)
    assert missing == []
    assert len(cited) > 8


def test_the_cautions_of_the_readme_are_those_of_the_report() -> None:
    from stresskit.runs.cautions import STANDING

    text = README.read_text(encoding="utf-8")
    assert [s for s in STANDING if s not in text] == []


def test_the_page_of_commands_lists_each_with_an_example() -> None:
    from stresskit.cli import app

    text = (ROOT / "docs" / "command-line.md").read_text(encoding="utf-8")
    listed = re.findall(r"^## ([a-z-]+)$", text, re.MULTILINE)
    assert listed == [name for name in app.resolved_commands() if not name.startswith("-")]
    for name in listed:
        part = text.split(f"\n## {name}\n")[1].split("\n## ")[0]
        assert f"\n```\nstresskit {name}" in part


def test_the_page_of_the_workbook_lists_its_sheets() -> None:
    from stresskit.report.workbook import render_result
    from tests.report.report_samples import sample

    text = (ROOT / "docs" / "workbook.md").read_text(encoding="utf-8")
    listed = {n.strip() for row in re.findall(r"^\| ([^|`]+) \|", text, re.MULTILINE) for n in row.split(",")}
    names = openpyxl.load_workbook(io.BytesIO(render_result(sample(steps=12)))).sheetnames
    assert set(names) <= listed
