"""Premia of characteristics: each premium with its errors, for a table of characteristics that the analyst brings."""

from __future__ import annotations

from soffit.estimate.cross_section import PremiumError
from soffit.present.spec import Column, Exhibit, NumberForm, TableSpec
from soffit.present.wording.numbers import plural, show_range
from soffit.present.wording.prices_of_risk import (
    characteristics_finding,
    characteristics_sample_line,
    errors_name,
)
from soffit.study import CharacteristicsPriced, Study

__all__ = ["exhibit", "premium_table"]


def exhibit(study: Study, priced: CharacteristicsPriced) -> Exhibit:
    """Build the exhibit of premia of characteristics.

    Parameters
    ----------
    study : Study
        The study they belong to.
    priced : CharacteristicsPriced
        What :meth:`soffit.study.Study.characteristics` gave.
    """
    notes = [
        f"no cross-section in {plural(len(dates), priced.sample.frequency.noun)} "
        f"({show_range(dates[0], dates[-1], NumberForm.DATE)}): {reason}"
        for reason, dates in priced.skipped.groupby(priced.skipped).groups.items()
    ]
    return Exhibit(
        key="characteristics",
        title="Do characteristics get paid?",
        sample=characteristics_sample_line(study, priced),
        finding=characteristics_finding(priced),
        tables=(premium_table(study, priced),),
        sources=("fama-macbeth-1973", "newey-west-1987"),
        cautions=(
            "A premium is a return per unit of the characteristic, not of a portfolio that can be held.",
        ),
        notes=tuple(notes),
    )


def premium_table(study: Study, priced: CharacteristicsPriced) -> TableSpec:
    """Tabulate the premia with both kinds of error."""
    percent, ratio = NumberForm.PERCENT, NumberForm.RATIO
    plain, robust = PremiumError.FAMA_MACBETH, PremiumError.NEWEY_WEST
    return TableSpec(
        key="characteristics-premia",
        title="Premia of characteristics",
        columns=(
            Column("premium", "Return a year per unit", percent),
            Column(f"error {plain}", f"Std error ({errors_name(plain)})", percent),
            Column(f"t {plain}", f"t ({errors_name(plain)})", ratio),
            Column(f"p {plain}", f"p ({errors_name(plain)})", NumberForm.PVALUE),
            Column(f"t {robust}", f"t ({errors_name(robust)})", ratio),
            Column(f"p {robust}", f"p ({errors_name(robust)})", NumberForm.PVALUE),
        ),
        frame=priced.table,
        index_heading="Premium",
        footnote=(
            f"{characteristics_sample_line(study, priced)}. Newey–West errors with {plural(priced.fit.lags, 'lag')}."
        ),
    )
