"""Public things say what they are and what each of their arguments is.

A method that overrides a described one may lean on that description.
"""

import ast
import contextlib
import re

import pytest
from house import ROOT, modules

SECTION = re.compile(r"^Parameters\n-{3,}\n(.*?)(?=^\S[^\n]*\n-{3,}\n|\Z)", re.M | re.S)


def named_parameters(docstring):
    """Names listed in the numpydoc Parameters section."""
    found = SECTION.search(docstring)
    if found is None:
        return set()
    heads = [line for line in found.group(1).splitlines() if line and not line[0].isspace()]
    return {name.strip().lstrip("*") for head in heads for name in head.split(":")[0].split(",")}


def arguments(function, *, method):
    """Names of a function's arguments, without the one a method is bound to."""
    spec = function.args
    names = [a.arg for a in [*spec.posonlyargs, *spec.args]]
    static = any(ast.unparse(d) == "staticmethod" for d in function.decorator_list)
    if method and not static:
        names = names[1:]
    names += [a.arg for a in spec.kwonlyargs]
    return names + [a.arg for a in (spec.vararg, spec.kwarg) if a is not None]


def public_things(tree):
    """Public classes, functions and methods: (dotted name, node, is a method)."""
    kinds = (ast.ClassDef, ast.FunctionDef, ast.AsyncFunctionDef)
    for node in tree.body:
        if not isinstance(node, kinds) or node.name.startswith("_"):
            continue
        yield node.name, node, False
        if isinstance(node, ast.ClassDef):
            for inner in node.body:
                if isinstance(inner, kinds) and not inner.name.startswith("_"):
                    yield f"{node.name}.{inner.name}", inner, True


def is_command(node):
    """Say whether a function is a command of the command line, whose options carry their own help."""
    return any(re.search(r"\.(command|callback)\b", ast.unparse(d)) for d in node.decorator_list)


def classes(trees):
    """Every class by name: (names of its bases, names of its described methods)."""
    found = {}
    for tree in trees:
        for node in ast.walk(tree):
            if isinstance(node, ast.ClassDef):
                bases = [ast.unparse(b).split("[")[0].split(".")[-1] for b in node.bases]
                inner = [n for n in node.body if isinstance(n, ast.FunctionDef)]
                found[node.name] = bases, {n.name for n in inner if ast.get_docstring(n)}
    return found


def described_above(dotted, known):
    """Say whether a method's description stands in a base class."""
    owner, _, method = dotted.rpartition(".")
    bases = known.get(owner, ((), ()))[0]
    return any(
        method in known[base][1] or described_above(f"{base}.{method}", known)
        for base in bases
        if base in known
    )


def complaints(source, known):
    """Everything undocumented in a module's source, given all classes."""
    found = []
    for name, node, method in public_things(ast.parse(source)):
        docstring = ast.get_docstring(node)
        if not docstring and method and described_above(name, known):
            continue
        if not docstring:
            found.append(f"line {node.lineno}: {name} has no docstring")
        elif not isinstance(node, ast.ClassDef) and not is_command(node):
            wanted = arguments(node, method=method)
            missing = [a for a in wanted if a not in named_parameters(docstring)]
            if len(wanted) > 1 and missing:
                found.append(f"line {node.lineno}: {name} does not describe {', '.join(missing)}")
    return found


def readable_trees():
    """Trees of all modules that parse; one that does not fails its own test only."""
    for path in modules():
        with contextlib.suppress(SyntaxError):
            yield ast.parse(path.read_text(encoding="utf-8"))


@pytest.fixture(scope="module")
def known():
    return classes(readable_trees())


@pytest.mark.parametrize("path", modules(), ids=lambda p: str(p.relative_to(ROOT)))
def test_public_things_are_described(path, known):
    assert complaints(path.read_text(encoding="utf-8"), known) == []


def test_the_check_itself_notices():
    source = '''
class A:
    """A."""
    def bare(self): ...
    def half(self, x, *, y):
        """Half.

        Parameters
        ----------
        x : float
            One.

        Returns
        -------
        y : float
        """
def whole(a, b, *c):
    """Whole.

    Parameters
    ----------
    a, b : float
        Two.
    *c : float
    """
def one(x):
    """One."""
class B(A):
    """B."""
    def half(self, x, *, y): ...
    def whole(self): ...
'''
    assert complaints(source, classes([ast.parse(source)])) == [
        "line 4: A.bare has no docstring",
        "line 5: A.half does not describe y",
        "line 31: B.whole has no docstring",
    ]
