"""The study: every result of a panel under its settings, computed once, when it is asked for."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from datetime import date
from typing import TYPE_CHECKING, Any

import pandas as pd

from soffit.estimate.statistic import NotApplicable
from soffit.estimate.steps import Steps, drained
from soffit.hedge.costs import LegKind
from soffit.hedge.ticket import Instrument, Rounding, Ticket
from soffit.hedge.walk_forward import WalkSchedule
from soffit.hedge.weights import HedgeRule
from soffit.intake.options import choice
from soffit.judge.large_n import LargeN, large_n_test
from soffit.judge.wald import OverRejection, WaldTests, wald_lags, wald_tests
from soffit.settings import CeilingForm
from soffit.study.alpha_under_ceiling import AlphaUnderCeiling
from soffit.study.base import COSTS, CROSS_SECTION, PREMIA, REGRESSION, SAMPLE, StudyBase, computed, in_steps
from soffit.study.ceiling_verdict import CeilingMap, CeilingVerdict
from soffit.study.characteristic_premia import CharacteristicsPriced, CharacteristicTable
from soffit.study.factor_regression import FactorRegression
from soffit.study.factor_sets import FactorSets
from soffit.study.hedge_book import BookAlpha, BookLimits, HedgedBook, book_alphas
from soffit.study.hedge_costs import WalkCosts
from soffit.study.hedge_ratios import FactorHedge
from soffit.study.hedge_settings import cost_rates, hedge_rule, known_names, leg_kinds, walk_schedule
from soffit.study.hedge_ticket import Mimicking, make_mimicking, make_ticket
from soffit.study.hedge_walk import HedgeWalk
from soffit.study.joint_evidence import JointPower, ResidualAssumptions, robust_sizes
from soffit.study.joint_test import JointTest
from soffit.study.many_alphas import ManyAlphas
from soffit.study.prices_of_risk import PricesOfRisk
from soffit.study.sample import Sample
from soffit.study.sharpe_ratios import SharpeGap, SharpeTable
from soffit.study.vintage import VintageEffect

if TYPE_CHECKING:
    pass

__all__ = ["Study"]


class Study(StudyBase):
    """A panel of returns and the settings to judge it by; every result is a method.

    Change settings with :meth:`changed`, which gives another study on the same panel; results that the change
    does not touch are shared, not computed again.

    Parameters
    ----------
    panel : Panel
        Aligned, decimal, excess returns.
    settings : Settings, optional
        Every choice; defaults otherwise.

    Examples
    --------
    >>> study = Study.open("returns.csv", factors="factors.csv")  # doctest: +SKIP
    >>> study.ceiling(0.8).needed  # doctest: +SKIP
    """

    @computed(*SAMPLE)
    def sample(self) -> Sample:
        """Rows, assets and factors that the settings choose."""
        return Sample.of(self.panel, self.settings)

    @computed(*REGRESSION)
    def regression(self) -> FactorRegression:
        """Regress every asset on the factors."""
        return FactorRegression.of(self.sample(), self.settings)

    @computed(*REGRESSION)
    def joint_test(self) -> JointTest:
        """Test that all alphas are zero."""
        return JointTest.of(self.regression(), self.settings)

    @computed(*REGRESSION)
    def wald(self) -> WaldTests:
        """Asymptotic Wald tests of zero alphas: classical, heteroskedasticity-robust and HAC by the lag rule."""
        joint, settings = self.joint_test(), self.settings
        factors = joint.block.factors
        lags = wald_lags(settings.lag_rule, joint.fit, factors, fixed=settings.lags)
        return wald_tests(
            joint.fit, joint.alphas, factors, lags=lags, nominal=round(1.0 - settings.level, 12)
        )

    def wald_sizes(self) -> tuple[OverRejection | NotApplicable, OverRejection | NotApplicable]:
        """How often the robust and the HAC Wald test reject zero alphas that are truly zero, by simulation."""
        return drained(self.wald_sizes_steps())

    @in_steps(*REGRESSION, "seed")
    def wald_sizes_steps(self) -> Steps[tuple[OverRejection | NotApplicable, OverRejection | NotApplicable]]:
        """Steps of :meth:`wald_sizes`, for :func:`soffit.engine.run_here` or a panel's progress bar."""
        wald, joint = self.wald(), self.joint_test()
        size = round(1.0 - self.settings.level, 12)
        return (yield from robust_sizes(wald, joint, size, self.settings.seed))

    @computed(*SAMPLE)
    def large_n(self) -> LargeN:
        """Test zero alphas by their squared t ratios, which needs no more periods than assets."""
        return large_n_test(self.joint_test().fit)

    @computed(*REGRESSION)
    def assumptions(self) -> ResidualAssumptions:
        """Check autocorrelation, heteroskedasticity and normality of the joint test's residuals."""
        return ResidualAssumptions.of(self.joint_test())

    @computed(*SAMPLE, "level", "power_sharpe")
    def power(self) -> JointPower:
        """Power of the GRS test against the settings' Sharpe ratio, and the sample it would need."""
        return JointPower.of(self.joint_test(), self.settings)

    def alpha_under_ceiling(
        self, ceiling: float | None = None, form: CeilingForm | None = None
    ) -> AlphaUnderCeiling:
        """Say which alphas may be used under a Sharpe ceiling.

        Parameters
        ----------
        ceiling : float, optional
            Highest Sharpe ratio a year; from the settings if None.
        form : CeilingForm, optional
            Which portfolio the hard bound binds; from the settings if None.

        Raises
        ------
        SettingError
            If the ceiling is negative or not a number.
        """
        values = {"ceiling": ceiling, "ceiling_form": form}
        settings = self.settings.changed({name: value for name, value in values.items() if value is not None})
        return AlphaUnderCeiling(self.joint_test(), settings.ceiling, settings.ceiling_form)

    @computed(*REGRESSION, "trials")
    def ceiling_map(self) -> CeilingMap:
        """What the alphas say about ceilings, before one is named."""
        return CeilingMap(self.regression(), self.joint_test(), self.settings.trials)

    def ceiling(self, ceiling: float | None = None, form: CeilingForm | None = None) -> CeilingVerdict:
        """Hold a Sharpe ceiling against the alphas.

        Parameters
        ----------
        ceiling : float, optional
            Highest Sharpe ratio a year; from the settings if None.
        form : CeilingForm, optional
            Which portfolio the ceiling binds; from the settings if None.
        """
        chosen = self.settings if ceiling is None and form is None else None
        if chosen is None:
            values = {"ceiling": ceiling, "ceiling_form": form}
            chosen = self.settings.changed(
                {name: value for name, value in values.items() if value is not None}
            )
        return self.ceiling_map().at(chosen.ceiling, chosen.ceiling_form)

    @computed(*SAMPLE, "lag_rule", "lags", "level", "trials")
    def sharpe_ratios(self) -> SharpeTable:
        """Sharpe ratios of every factor and asset, and of the factors' best combination."""
        return SharpeTable.of(self.sample(), self.joint_test(), self.settings)

    @computed(*SAMPLE, "lag_rule", "lags", "level", "bootstrap_draws", "seed")
    def sharpe_difference(self, first: str, second: str) -> SharpeGap:
        """Test that two Sharpe ratios are equal.

        Parameters
        ----------
        first, second : str
            Factors or assets of the sample.

        Raises
        ------
        SettingError
            If a name is neither.
        EstimationError
            If the two share too few rows.
        """
        return SharpeGap.of(self.sample(), first, second, self.settings)

    @computed(*REGRESSION, "trials")
    def many_alphas(self) -> ManyAlphas:
        """Adjust the alphas' p-values for the number of tests."""
        return ManyAlphas.of(self.regression(), self.settings)

    @computed(*REGRESSION, "factor_sets")
    def factor_sets(self) -> FactorSets:
        """Hold sets of factors against the same assets, and each factor against the others.

        Raises
        ------
        SettingError
            If a set names a factor that the panel lacks, or there is no factor.
        EstimationError
            If a regression cannot be run, or a factor is a combination of the others.
        """
        return FactorSets.of(self.panel, self.sample(), self.joint_test().block, self.settings)

    @computed(*CROSS_SECTION)
    def prices_of_risk(self, *, non_traded: tuple[str, ...] = ()) -> PricesOfRisk:
        """Estimate what the betas get paid, by the two-pass method of Fama and MacBeth (1973).

        Parameters
        ----------
        non_traded : tuple of str
            Non-traded factors of the panel to price beside the traded ones.

        Raises
        ------
        EstimationError
            If the prices are not identified or the weighting does not exist for this sample.
        SettingError
            If a named factor is not in the panel.
        """
        return PricesOfRisk.of(self.sample(), self.settings, self.panel, non_traded)

    def vintage(self, earlier: Any) -> VintageEffect:
        """Hold the alphas against those on an earlier vintage of the factors.

        Parameters
        ----------
        earlier : Panel, DataFrame or path
            The earlier download of the same factors.

        Raises
        ------
        InputError
            If it cannot be read or lacks a factor of the study.
        """
        return VintageEffect.of(self.panel, self.settings, earlier)

    def characteristics(
        self,
        table: pd.DataFrame | Mapping[str, pd.DataFrame],
        *,
        lag: int = 1,
        constant: bool = True,
    ) -> CharacteristicsPriced:
        """Estimate what characteristics get paid, from a cross-section of returns each period.

        Uses every asset and period that has its values, whatever the histories setting.

        Parameters
        ----------
        table : DataFrame, or mapping of str to DataFrame
            A frame whose index has dates and assets, with a column a characteristic; or a frame of dates by
            assets for each characteristic.
        lag : int
            Periods from a characteristic's date to the return that it explains.
        constant : bool
            Whether each cross-section has a constant.

        Raises
        ------
        InputError
            If the table has another shape; common factors are sent to :meth:`prices_of_risk`.
        EstimationError
            If a characteristic is a common factor, or too few periods have a cross-section.
        """
        return self._characteristics(CharacteristicTable.of(table, self.sample().assets), lag, constant)

    @computed(*PREMIA)
    def _characteristics(self, table: CharacteristicTable, lag: int, constant: bool) -> CharacteristicsPriced:
        return CharacteristicsPriced.of(self.sample(), table, self.settings, lag=lag, constant=constant)

    @property
    def _everyone(self) -> list[str]:
        """Names of all assets and traded factors of the panel."""
        return [str(name) for frame in (self.panel.assets, self.panel.factors) for name in frame]

    def _hedge_rule(self) -> HedgeRule:
        return hedge_rule(self.settings, self.sample(), self._everyone)

    def hedge(self, *, latest: bool = False) -> FactorHedge:
        """Hedge every asset with the factors.

        Parameters
        ----------
        latest : bool
            Take the ratios from the latest window of the walk-forward, those that a ticket trades, rather than from
            the whole sample.

        Raises
        ------
        SettingError
            If a cap admits no hedge or a cost belongs to nobody.
        EstimationError
            If the sample is too short or a factor does not move in it.
        """
        return self._hedge(self._hedge_rule(), walk_schedule(self.settings) if latest else None)

    @computed(*SAMPLE)
    def _hedge(self, rule: HedgeRule, schedule: WalkSchedule | None) -> FactorHedge:
        return FactorHedge.of(self.sample(), rule, schedule)

    def walk_forward(self) -> HedgeWalk:
        """Walk the hedge through the sample without look-ahead, and hold it against its promise.

        Raises
        ------
        SettingError, EstimationError
            As :meth:`hedge` does, and if no asset has enough hedged periods.
        """
        return self._walk(self._hedge_rule(), walk_schedule(self.settings))

    @computed(*REGRESSION)
    def _walk(self, rule: HedgeRule, schedule: WalkSchedule) -> HedgeWalk:
        choice_of_errors = self.regression().choice
        return HedgeWalk.of(self.sample(), rule, schedule, choice_of_errors, self.panel.risk_free)

    def costs(
        self,
        *,
        kinds: Mapping[str, LegKind | str] | None = None,
        short: Iterable[str] = (),
        borrowed: float = 0.0,
    ) -> WalkCosts:
        """Charge the settings' costs to the walked hedge.

        Parameters
        ----------
        kinds : mapping of str to LegKind, optional
            What each hedge leg is, which decides what it costs to carry; cash where not said.
        short : iterable of str
            Assets held short, with their hedge legs long.
        borrowed : float
            Share of each long asset bought with borrowed money.

        Raises
        ------
        SettingError
            For an unknown name or kind, or a negative cost.
        """
        sample = self.sample()
        legs = leg_kinds(kinds, sample.factor_names)
        sold = known_names(short, [str(name) for name in sample.assets], "asset")
        return self._costs(self._hedge_rule(), walk_schedule(self.settings), legs, sold, borrowed)

    @computed(*REGRESSION, *COSTS)
    def _costs(
        self,
        rule: HedgeRule,
        schedule: WalkSchedule,
        legs: tuple[LegKind, ...],
        short: tuple[str, ...],
        borrowed: float,
    ) -> WalkCosts:
        rates = cost_rates(self.settings, self.sample(), self._everyone, legs, borrowed)
        return WalkCosts.of(self._walk(rule, schedule), rates, short, self.settings.level)

    def ticket(
        self,
        notionals: Mapping[str, float],
        instruments: Mapping[str, Instrument],
        *,
        as_of: date | str,
        rounding: Rounding | str = Rounding.NEAREST,
        currency: str = "USD",
    ) -> Ticket:
        """Write the orders that hedge some assets with the latest ratios.

        Parameters
        ----------
        notionals : mapping of str to float
            Money in each asset, negative where short.
        instruments : mapping of str to Instrument
            What is traded for each factor.
        as_of : date or str
            Date of the ticket, as a date or ``"2024-02-29"``.
        rounding : Rounding
            How contracts are rounded.
        currency : str
            Currency of the notionals.

        Raises
        ------
        EstimationError
            If the estimates are too old for that date, with the reason.
        SettingError
            For an unknown asset or factor, or a leg without an instrument.
        """
        return make_ticket(
            self.hedge(latest=True),
            walk_schedule(self.settings),
            notionals,
            instruments,
            as_of=date.fromisoformat(as_of) if isinstance(as_of, str) else as_of,
            rounding=choice(Rounding, rounding, "rounding"),
            currency=currency,
        )

    def book(
        self,
        assets: Iterable[str] | None = None,
        *,
        alphas: BookAlpha | str = BookAlpha.ESTIMATED,
        diagonal: bool = False,
        risk_aversion: float | None = None,
        position_limit: float | None = None,
        gross_limit: float | None = None,
    ) -> HedgedBook:
        """Weigh several hedged assets as one book (Treynor and Black 1973).

        Parameters
        ----------
        assets : iterable of str, optional
            Assets that the book may hold; all assets of the joint test if None.
        alphas : BookAlpha
            Estimated alphas, shrunk under the settings' ceiling, or net of the walked hedge's costs.
        diagonal : bool
            Whether the weights ignore residual correlations.
        risk_aversion : float, optional
            Price of variance that sets the scale; from the settings if None.
        position_limit, gross_limit : float, optional
            Largest absolute weight and largest sum of absolute weights.

        Raises
        ------
        EstimationError
            If the residual covariances are singular, the ceiling leaves no alpha, or a history is too short.
        SettingError
            For an unknown name, or a limit that admits no position.
        """
        limits = BookLimits(
            choice(BookAlpha, alphas, "alphas"),
            diagonal,
            self.settings.hedge.risk_aversion if risk_aversion is None else risk_aversion,
            position_limit,
            gross_limit,
        )
        joint = self.joint_test()
        names = [str(name) for name in self.sample().assets]
        members = None if assets is None else known_names(assets, names, "asset")
        cost: pd.Series[float] | None = None
        if limits.alphas is BookAlpha.NET:
            alpha = self.regression().alpha
            cost = self.costs(short=[str(name) for name in alpha.index[alpha < 0]]).table["cost"]
        used = book_alphas(joint, limits.alphas, self.settings.ceiling, cost)
        return HedgedBook.of(joint, limits, self.settings.ceiling, used, members)

    def mimicking(self, base: Iterable[str], factors: Iterable[str] | None = None) -> Mimicking:
        """Build portfolios of traded series that follow the panel's non-traded factors.

        Parameters
        ----------
        base : iterable of str
            Assets or traded factors that the portfolios may hold.
        factors : iterable of str, optional
            Non-traded factors; all of them if None.

        Raises
        ------
        SettingError
            For an unknown name, or a panel without non-traded factors.
        EstimationError
            If too few periods have all the series, or the base is collinear.
        """
        return make_mimicking(self.panel, factors, base)
