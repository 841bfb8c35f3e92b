"""The case: from a file or a mapping to checked plain data in SI."""

from srcfit.case.load import load_case, make_case
from srcfit.case.member import make_member

__all__ = ["load_case", "make_case", "make_member"]
