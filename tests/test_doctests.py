"""The examples in the docstrings of the public face run and tell the truth."""

import doctest

import pytest

import srcfit
from srcfit.sklearn import SourceRegressor

FACE = {
    name: getattr(srcfit, name)
    for name in ("load_case", "make_case", "make_member", "read", "recover", "kernel", "modes",
                 "respond")
} | {"SourceRegressor": SourceRegressor}  # fmt: skip


@pytest.mark.parametrize("name", FACE)
def test_examples_of(name):
    (found,) = (t for t in doctest.DocTestFinder(recurse=False).find(FACE[name], name, globs={}))
    assert found.examples, f"{name} has no example"
    said = []
    result = doctest.DocTestRunner(optionflags=doctest.NORMALIZE_WHITESPACE).run(
        found, out=said.append
    )
    assert result.failed == 0, "".join(said)
