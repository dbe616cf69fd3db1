"""Documentation that cannot rot: parameters match signatures, examples run, README stays short."""

from __future__ import annotations

import argparse
import ast
import doctest
import importlib
import re
from pathlib import Path

import pytest

from xlplan.cli import build_parser

ROOT = Path(__file__).resolve().parent.parent
FILES = sorted((ROOT / "xlplan").rglob("*.py"))
MODULES = [
    ".".join(file.relative_to(ROOT).with_suffix("").parts).removesuffix(".__init__")
    for file in FILES
    if file.name != "__main__.py"
]


def documented_parameters(docstring: str) -> list[str] | None:
    """Names listed under ``Parameters``; None where there is no such section.

    >>> documented_parameters('''Sum.
    ...
    ... Parameters
    ... ----------
    ... a, b : float, the
    ...     summands : both of them
    ...
    ... Returns
    ... -------
    ... c : float''')
    ['a', 'b']
    """
    lines = [line.rstrip() for line in docstring.splitlines()]
    starts = [
        i
        for i in range(len(lines) - 1)
        if lines[i].strip() == "Parameters" and set(lines[i + 1].strip()) == {"-"}
    ]
    if not starts:
        return None
    margin = len(lines[starts[0]]) - len(lines[starts[0]].lstrip())
    names: list[str] = []
    for line, following in zip(lines[starts[0] + 2 :], [*lines[starts[0] + 3 :], ""], strict=False):
        text = line.strip()
        # A blank line, or the title of the next section, ends the list.
        if not text or set(following.strip()) == {"-"}:
            break
        if len(line) - len(line.lstrip()) == margin:
            # An entry may name several parameters; a wrapped list of names ends in a comma.
            head = re.split(r" : |;|:", text)[0]
            names += [name.strip(" *`") for name in head.split(",") if name.strip(" *`")]
    return names


def parameter_faults(tree: ast.AST) -> list[str]:
    """Functions whose documented parameters are not those of their signature."""
    faults = []
    for node in ast.walk(tree):
        if not isinstance(node, ast.FunctionDef | ast.AsyncFunctionDef):
            continue
        documented = documented_parameters(ast.get_docstring(node) or "")
        if documented is None:
            continue
        arguments = node.args
        signature = [
            a.arg
            for a in (*arguments.posonlyargs, *arguments.args, *arguments.kwonlyargs)
            if a.arg not in ("self", "cls")
        ]
        signature += [a.arg for a in (arguments.vararg, arguments.kwarg) if a is not None]
        if sorted(documented) != sorted(signature):
            faults.append(f"line {node.lineno} {node.name}: {documented} is not {signature}")
    return faults


@pytest.mark.parametrize("file", FILES, ids=lambda file: file.relative_to(ROOT).as_posix())
def test_documented_parameters_match_the_signature(file: Path) -> None:
    faults = parameter_faults(ast.parse(file.read_text("utf-8")))
    assert not faults, "\n".join(faults)


def test_a_renamed_parameter_is_found() -> None:
    source = '''
def area(width, height):
    """Area.

    Parameters
    ----------
    width, depth : float
    """
'''
    assert parameter_faults(ast.parse(source))
    assert not parameter_faults(ast.parse(source.replace("depth", "height")))


@pytest.mark.parametrize(
    "module", [*MODULES, "tests.builders", "tests.random_studies", "tests.test_docs"]
)
def test_examples_in_docstrings_run(module: str) -> None:
    assert doctest.testmod(importlib.import_module(module)).failed == 0


def test_there_are_examples_to_run() -> None:
    found = [
        example
        for module in MODULES
        for test in doctest.DocTestFinder().find(importlib.import_module(module))
        for example in test.examples
    ]
    assert found


def test_readme_names_no_module_and_starts_with_two_commands() -> None:
    text = (ROOT / "README.md").read_text("utf-8")
    commands = re.findall(r"^```sh\n(.*?)^```$", text, flags=re.MULTILINE | re.DOTALL)
    assert len(commands) == 2
    assert "xlplan solve demo.xlsx" in commands[0]
    assert "pytest" in commands[1]
    assert not re.search(r"\w+\.py\b|xlplan\.\w+", re.sub(r"xlplan\.xlsx", "", text))


def test_readme_mentions_only_options_that_exist() -> None:
    text = (ROOT / "README.md").read_text("utf-8")
    parser = build_parser()
    known = {option for action in _actions(parser) for option in action.option_strings}
    mentioned = set(re.findall(r"(?<![-\w])--[a-z][a-z-]*", text))
    assert mentioned
    assert mentioned <= known, mentioned - known


def _actions(parser: argparse.ArgumentParser) -> list[argparse.Action]:
    """Options of a parser and of all its commands."""
    actions = list(parser._actions)
    for action in parser._actions:
        if isinstance(action, argparse._SubParsersAction):
            for command in action.choices.values():
                actions += _actions(command)
    return actions


def test_files_named_for_developers_exist() -> None:
    text = (ROOT / "DEVELOPERS.md").read_text("utf-8")
    named = {name for name in re.findall(r"`([\w/.]+\.py)`", text) if "*" not in name}
    all_files = [
        f.relative_to(ROOT).as_posix() for f in ROOT.rglob("*.py") if ".venv" not in f.parts
    ]
    missing = [name for name in named if not any(f"/{f}".endswith(f"/{name}") for f in all_files)]
    assert named
    assert not missing, missing


def test_every_module_says_what_it_is() -> None:
    """Empty package files have nothing to say."""
    sources = {str(file): file.read_text("utf-8") for file in FILES}
    silent = [
        f for f, text in sources.items() if text.strip() and not ast.get_docstring(ast.parse(text))
    ]
    assert not silent, silent
