"""Sentences about many alphas at once."""

from __future__ import annotations

from soffit.estimate.statistic import NotApplicable
from soffit.judge.multiplicity import Adjustment
from soffit.present.spec import Finding, NumberForm
from soffit.present.wording.numbers import join_names, plural, show
from soffit.study import ManyAlphas

__all__ = ["many_alphas_finding", "tests_phrase"]


def tests_phrase(found: ManyAlphas) -> str:
    """Write how many tests are counted: ``m = 30 tests (12 alphas and 18 unseen trials)``."""
    tests, count = found.tests.tests, found.tests.count
    unseen = tests - count
    rest = f" ({plural(count, 'alpha')} and {plural(unseen, 'unseen trial')})" if unseen else ""
    return f"m = {plural(tests, 'test')}{rest}"


def many_alphas_finding(found: ManyAlphas) -> Finding:
    """Say how many alphas stand out one at a time, how many after adjustment, and the hurdle for a single one."""
    size, count = show(found.tests.size, NumberForm.SHARE), found.tests.count
    if not count:
        return Finding("No alpha has a p-value: the factors replicate every asset.")
    alone = found.names()
    verb = "differs" if len(alone) == 1 else "differ"
    head = f"One at a time, {len(alone):,} of {plural(count, 'alpha')} {verb} from zero at {size}"
    strict, rate = found.names(Adjustment.HOLM), found.names(Adjustment.BENJAMINI_YEKUTIELI)
    kept = f" ({join_names(strict)})" if strict else ""
    middle = (
        f"after Holm's adjustment over {tests_phrase(found)}, {_count(len(strict))}{kept}; with the false "
        f"discovery rate held at {size} under any dependence, {_count(len(rate))}"
    )
    hurdle = (
        f"A single alpha must pass |t| = {show(found.hurdle, NumberForm.RATIO)} instead of "
        f"{show(found.single_hurdle, NumberForm.RATIO)}."
    )
    share = found.share
    zeros = (
        ""
        if isinstance(share, NotApplicable)
        else f" An estimated {show(share.value, NumberForm.SHARE)} of the alphas are truly zero."
    )
    return Finding(f"{head}; {middle}. {hurdle}{zeros}")


def _count(number: int) -> str:
    if not number:
        return "none does"
    return f"{number:,} {'does' if number == 1 else 'do'}"
