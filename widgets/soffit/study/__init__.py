"""Study = Panel + Settings: the one door to every result."""

from soffit.study.ceiling_verdict import CeilingFacts, CeilingMap, CeilingVerdict
from soffit.study.door import Study
from soffit.study.factor_regression import FactorRegression
from soffit.study.joint_test import JointTest
from soffit.study.sample import Block, Sample

__all__ = [
    "Block",
    "CeilingFacts",
    "CeilingMap",
    "CeilingVerdict",
    "FactorRegression",
    "JointTest",
    "Sample",
    "Study",
]
