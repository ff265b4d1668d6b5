"""Study = Panel + Settings: the one door to every result."""

from soffit.study.alpha_under_ceiling import AlphaUnderCeiling
from soffit.study.ceiling_verdict import CeilingFacts, CeilingMap, CeilingVerdict
from soffit.study.characteristic_premia import CharacteristicsPriced, CharacteristicTable
from soffit.study.door import Study
from soffit.study.factor_regression import FactorRegression
from soffit.study.factor_sets import FactorSets
from soffit.study.hedge_book import BookAlpha, BookLimits, HedgedBook
from soffit.study.hedge_costs import WalkCosts
from soffit.study.hedge_ratios import FactorHedge
from soffit.study.hedge_ticket import Mimicking
from soffit.study.hedge_walk import HedgeWalk
from soffit.study.joint_evidence import JointPower, ResidualAssumptions
from soffit.study.joint_test import JointTest
from soffit.study.many_alphas import ManyAlphas
from soffit.study.prices_of_risk import PricesOfRisk
from soffit.study.sample import Block, Sample
from soffit.study.sharpe_ratios import SharpeGap, SharpeTable

__all__ = [
    "AlphaUnderCeiling",
    "Block",
    "BookAlpha",
    "BookLimits",
    "CeilingFacts",
    "CeilingMap",
    "CeilingVerdict",
    "CharacteristicTable",
    "CharacteristicsPriced",
    "FactorHedge",
    "FactorRegression",
    "FactorSets",
    "HedgeWalk",
    "HedgedBook",
    "JointPower",
    "JointTest",
    "ManyAlphas",
    "Mimicking",
    "PricesOfRisk",
    "ResidualAssumptions",
    "Sample",
    "SharpeGap",
    "SharpeTable",
    "Study",
    "WalkCosts",
]
