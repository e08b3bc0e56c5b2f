"""The package keeps its own rules: imports flow one way, files stay small, nothing unsafe is used.

Expected values are the rules themselves (DEVELOPERS.md, "The flow" and "Conventions").
"""

from __future__ import annotations

import ast
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

import pytest

import kernelfit

PACKAGE = Path(kernelfit.__file__).parent
FILES = sorted(PACKAGE.rglob("*.py"))
MAX_LINES = 600

# Each part may import from its own row or from a row above it.
FLOW: tuple[frozenset[str], ...] = (
    frozenset({"errors", "_typing", "version"}),
    frozenset({"_validation"}),
    frozenset({"recording"}),
    frozenset({"kernels"}),
    frozenset({"demo"}),  # the invented recording and its truth
    frozenset({"model"}),
    frozenset({"engine"}),
    frozenset({"fitting"}),
    frozenset({"inference"}),
    frozenset({"diagnostics", "comparison", "network"}),
    frozenset({"report"}),
    frozenset({"cli"}),
)
ROW = {part: k for k, row in enumerate(FLOW) for part in row}

# Imports against the flow, as (module, part it imports from), each with its reason. They must be inside a
# function or under TYPE_CHECKING, so that loading a module never needs what comes after it.
AGAINST_THE_FLOW: dict[tuple[str, str], str] = {
    ("kernelfit.model.coupling", "fitting"): "model.fit(recording) is what users type; fitting builds on the model",
    ("kernelfit.fitting.result", "inference"): "fit.parameters, fit.kernel_band and fit.summary() are the contract",
    ("kernelfit.fitting.profiles", "inference"): "fit.profile() and the like are methods of the fit",
    ("kernelfit.fitting.analyses", "inference"): "fit.bootstrap() and the like are methods of the fit",
    ("kernelfit.fitting.result", "diagnostics"): "fit.goodness() is the contract",
}

UNSAFE_MODULES = {
    "pickle",
    "cPickle",
    "dill",
    "cloudpickle",
    "marshal",
    "shelve",
    "subprocess",
    "socket",
    "urllib",
}
UNSAFE_CALLS = {"eval", "exec", "compile", "__import__"}


@dataclass(frozen=True)
class Imported:
    """One import of something of the package."""

    target: str  # "kernelfit.recording.grid"
    deferred: bool  # inside a function or under TYPE_CHECKING
    line: int


def module_name(file: Path) -> str:
    parts = file.relative_to(PACKAGE.parent).with_suffix("").parts
    return ".".join(parts[:-1] if parts[-1] == "__init__" else parts)


def part_of(module: str) -> str:
    """ "recording" of "kernelfit.recording.grid"; "" of the package itself."""
    return module.split(".")[1] if "." in module else ""


def imports_of(tree: ast.Module) -> Iterator[Imported]:
    def walk(node: ast.AST, deferred: bool) -> Iterator[Imported]:
        for child in ast.iter_child_nodes(node):
            if isinstance(child, ast.Import):
                names = [alias.name for alias in child.names]
            elif isinstance(child, ast.ImportFrom):
                assert child.level == 0, "imports are absolute"
                names = [child.module or ""]
                if child.module == "kernelfit":
                    names = [f"kernelfit.{a.name}" if a.name in ROW else "kernelfit" for a in child.names]
            else:
                inner = deferred or isinstance(child, ast.FunctionDef | ast.AsyncFunctionDef | ast.Lambda)
                if isinstance(child, ast.If) and "TYPE_CHECKING" in ast.dump(child.test):
                    inner = True
                yield from walk(child, inner)
                continue
            for name in names:
                if name.split(".")[0] == "kernelfit":
                    yield Imported(name, deferred, child.lineno)

    yield from walk(tree, False)


def parsed(file: Path) -> ast.Module:
    return ast.parse(file.read_text(encoding="utf-8"), filename=str(file))


def against_the_flow(file: Path) -> Iterator[Imported]:
    own = part_of(module_name(file))
    for imported in imports_of(parsed(file)):
        other = part_of(imported.target)
        if other and ROW[other] > ROW[own]:
            yield imported


INSIDE = [f for f in FILES if part_of(module_name(f))]  # the package's own __init__ may import everything


def name_of(file: Path) -> str:
    return module_name(file)


@pytest.mark.parametrize("file", INSIDE, ids=name_of)
def test_every_module_has_its_place_in_the_flow(file: Path) -> None:
    assert part_of(module_name(file)) in ROW


@pytest.mark.parametrize("file", INSIDE, ids=name_of)
def test_imports_follow_the_flow(file: Path) -> None:
    for imported in against_the_flow(file):
        place = f"{module_name(file)}, line {imported.line}: imports {imported.target}"
        assert (module_name(file), part_of(imported.target)) in AGAINST_THE_FLOW, f"{place} against the flow"
        assert imported.deferred, f"{place} when it is loaded; only a function may"


def test_no_exception_from_the_flow_outlives_its_use() -> None:
    used = {(module_name(f), part_of(i.target)) for f in INSIDE for i in against_the_flow(f)}
    assert used == set(AGAINST_THE_FLOW)
    assert all(AGAINST_THE_FLOW.values()), "every exception has its reason"


@pytest.mark.parametrize("file", INSIDE, ids=name_of)
def test_only_the_command_line_imports_the_package_as_a_whole(file: Path) -> None:
    whole = [i.line for i in imports_of(parsed(file)) if not part_of(i.target) and not i.deferred]
    assert not whole, f"lines {whole} import kernelfit itself, which imports this module"


@pytest.mark.parametrize("file", FILES, ids=name_of)
def test_no_file_is_too_long(file: Path) -> None:
    n_lines = len(file.read_text(encoding="utf-8").splitlines())
    assert n_lines <= MAX_LINES, f"{n_lines} lines: look for the second idea in it"


@pytest.mark.parametrize("file", FILES, ids=name_of)
def test_nothing_unsafe_is_used(file: Path) -> None:
    for node in ast.walk(parsed(file)):
        match node:
            case ast.Import(names=names):
                modules = {alias.name.split(".")[0] for alias in names}
            case ast.ImportFrom(module=str(module)):
                modules = {module.split(".")[0]}
            case ast.Call(func=ast.Name(id=called)):
                assert called not in UNSAFE_CALLS, f"line {node.lineno}: {called}"
                continue
            case ast.keyword(arg="allow_pickle", value=ast.Constant(value=allowed)):
                assert allowed is False, f"line {node.value.lineno}: allow_pickle"
                continue
            case _:
                continue
        assert not modules & UNSAFE_MODULES, f"line {node.lineno}: {modules & UNSAFE_MODULES}"


@pytest.mark.parametrize("file", FILES, ids=name_of)
def test_arguments_are_named(file: Path) -> None:
    """No **kwargs passed through: a call says what it means, and the type checker finds a wrong name."""
    for node in ast.walk(parsed(file)):
        if isinstance(node, ast.FunctionDef | ast.AsyncFunctionDef) and node.args.kwarg is not None:
            pytest.fail(f"line {node.lineno}: {node.name} takes **{node.args.kwarg.arg}")


@pytest.mark.parametrize("file", FILES, ids=name_of)
def test_warning_filters_are_left_alone(file: Path) -> None:
    changing = {"simplefilter", "filterwarnings", "resetwarnings"}
    for node in ast.walk(parsed(file)):
        if isinstance(node, ast.Attribute):
            assert node.attr not in changing, f"line {node.lineno}: {node.attr}"


@pytest.mark.parametrize("file", sorted((PACKAGE / "engine").glob("*.py")), ids=name_of)
def test_the_engine_knows_no_family(file: Path) -> None:
    """Loops get arrays: the name or class of a kernel in the engine would be a branch per family."""
    from kernelfit.kernels import KERNELS

    families = {cls.__name__ for cls in KERNELS.values()}
    for node in ast.walk(parsed(file)):
        if isinstance(node, ast.Name | ast.Attribute):
            name = node.id if isinstance(node, ast.Name) else node.attr
            assert name not in families, f"line {node.lineno}: {name}"
        if isinstance(node, ast.Constant) and isinstance(node.value, str):
            assert node.value not in KERNELS, f"line {node.lineno}: {node.value!r}"


def test_every_error_has_one_root_and_a_sentence() -> None:
    from kernelfit import errors

    for name, cls in vars(errors).items():
        if isinstance(cls, type) and issubclass(cls, BaseException) and cls.__module__ == errors.__name__:
            assert issubclass(cls, errors.KernelfitError | errors.KernelfitWarning), name
            assert cls.__doc__, name
