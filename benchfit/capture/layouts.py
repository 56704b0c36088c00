"""Telling a layout: each family judges the evidence, the strongest claim wins; a new family is one new entry."""

from __future__ import annotations

from benchfit.capture.evidence import Claim, Evidence, Family, gather
from benchfit.capture.families import FAMILIES
from benchfit.capture.page import Page
from benchfit.capture.refusals import REFUSALS


def tell(page: Page) -> tuple[Family, Claim, Evidence]:
    """The family with the strongest claim on a file, its claim, and the evidence; the first among equals.

    No file is left over: without a table one of the refusals claims it, with a table the last family does.
    """
    found = gather(page)
    claims = [
        (family, claim) for family in (*REFUSALS, *FAMILIES) if (claim := family.judge(found)) is not None
    ]
    family, claim = max(claims, key=lambda pair: pair[1].strength)
    return family, claim, found
