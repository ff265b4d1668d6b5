"""Settings: every choice an analyst can make, as one frozen value.

Controls, the command line, study files and a notebook's parameters are all made from this record.
Figures that a person types are annual; the code below converts them once.
"""

from __future__ import annotations

import tomllib
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from datetime import date
from enum import StrEnum
from pathlib import Path
from typing import Any, Self, cast

from pydantic import BaseModel, ConfigDict, Field, ValidationError, field_validator, model_validator
from pydantic.fields import FieldInfo

from soffit.errors import SettingError, nearest

__all__ = [
    "BetaWindow",
    "CeilingForm",
    "ChoiceGroup",
    "CostSettings",
    "CrossSectionSettings",
    "ErrorType",
    "FieldNote",
    "HedgeBeta",
    "HedgeSettings",
    "Histories",
    "LagRule",
    "Reference",
    "SecondPass",
    "Settings",
    "WindowKind",
]


class ErrorType(StrEnum):
    """Standard errors of the regressions."""

    CLASSICAL = "classical"
    HC0 = "HC0"
    HC1 = "HC1"
    HC2 = "HC2"
    HC3 = "HC3"
    HAC = "HAC"


class LagRule(StrEnum):
    """How the number of Newey-West lags is chosen."""

    FIXED = "fixed"
    RULE_OF_THUMB = "rule of thumb"
    AUTOMATIC = "Newey-West 1994"


class Reference(StrEnum):
    """Reference distribution of t ratios under robust errors."""

    STUDENT_T = "t"
    NORMAL = "normal"


class CeilingForm(StrEnum):
    """Which portfolio the ceiling binds."""

    ALONE = "each hedged asset alone"
    ON_FACTORS = "each asset on top of the factors"
    TOGETHER = "all assets together"


class Histories(StrEnum):
    """Which dates an estimate uses when series have unequal histories."""

    COMMON = "common sample"
    OWN = "own history"


class SecondPass(StrEnum):
    """Weighting of the cross-sectional regression."""

    OLS = "OLS"
    WLS = "WLS"
    GLS = "GLS"


class BetaWindow(StrEnum):
    """Sample of the betas that enter the cross-section."""

    FULL = "full sample"
    ROLLING = "rolling"


class WindowKind(StrEnum):
    """Estimation window of a walk-forward hedge."""

    ROLLING = "rolling"
    EXPANDING = "expanding"


class HedgeBeta(StrEnum):
    """How hedge betas are estimated."""

    PLAIN = "plain"
    VASICEK = "Vasicek"
    DIMSON = "Dimson"
    RIDGE = "ridge"


@dataclass(frozen=True)
class FieldNote:
    """How a settings field is presented: what a control, a help page and a report need to know.

    Parameters
    ----------
    label : str
        Short label of the control.
    help : str
        One sentence for the tooltip and the help page.
    unit : str
        Unit of the typed figure; empty where there is none.
    low, high, step : float, optional
        Range and step of a slider. The slider's range may be narrower than what is allowed.
    """

    label: str
    help: str
    unit: str = ""
    low: float | None = None
    high: float | None = None
    step: float | None = None


def _field(
    default: Any,
    label: str,
    help_: str,
    *,
    unit: str = "",
    slider: tuple[float, float, float] | None = None,
    **limits: Any,
) -> Any:
    low, high, step = slider if slider else (None, None, None)
    note = FieldNote(label, help_, unit, low, high, step)
    return Field(default, description=help_, json_schema_extra={"note": cast(Any, note.__dict__)}, **limits)


class ChoiceGroup(BaseModel):
    """A frozen group of choices: unknown names refused, change by copy."""

    model_config = ConfigDict(frozen=True, extra="forbid", allow_inf_nan=False, validate_default=True)

    @classmethod
    def fields(cls, prefix: str = "") -> Iterator[tuple[str, FieldInfo]]:
        """Dotted names and definitions of every field, groups opened up."""
        for name, info in cls.model_fields.items():
            if isinstance(info.annotation, type) and issubclass(info.annotation, ChoiceGroup):
                yield from info.annotation.fields(f"{prefix}{name}.")
            else:
                yield prefix + name, info

    @classmethod
    def note(cls, name: str) -> FieldNote:
        """How the field with this dotted name is presented.

        Raises
        ------
        SettingError
            If there is no such field.
        """
        known = dict(cls.fields())
        if name not in known:
            raise SettingError(f"There is no setting '{name}'", remedy=nearest(name, known))
        extra = known[name].json_schema_extra
        note = extra.get("note") if isinstance(extra, dict) else None
        return FieldNote(**cast("dict[str, Any]", note)) if note else FieldNote(name, "")


class CrossSectionSettings(ChoiceGroup):
    """Choices of the cross-sectional regressions."""

    second_pass: SecondPass = _field(
        SecondPass.OLS, "Second pass", "Weighting of the cross-sectional regression."
    )
    constant: bool = _field(True, "Constant", "Whether the cross-section has a free zero-beta return.")
    betas: BetaWindow = _field(
        BetaWindow.FULL, "Betas", "Betas from the whole sample, or from a window that ends before each month."
    )
    window: int = _field(
        60, "Beta window", "Periods in the rolling beta window.", unit="periods", slider=(24, 120, 6), ge=6
    )


class CostSettings(ChoiceGroup):
    """Costs of holding a hedge, as typed: basis points."""

    asset_half_spread: float = _field(
        10.0,
        "Half-spread, asset",
        "Half of the bid-ask spread paid on each unit of the asset traded.",
        unit="bp",
        slider=(0, 100, 1),
        ge=0,
    )
    factor_half_spread: float = _field(
        2.0,
        "Half-spread, hedge legs",
        "Half of the bid-ask spread paid on each unit of a hedge leg traded.",
        unit="bp",
        slider=(0, 50, 0.5),
        ge=0,
    )
    financing: float = _field(
        30.0,
        "Financing",
        "Spread over the risk-free rate paid on borrowed money.",
        unit="bp a year",
        slider=(0, 300, 5),
        ge=0,
    )
    borrow: float = _field(
        40.0, "Stock borrow", "Fee paid on short positions.", unit="bp a year", slider=(0, 500, 5), ge=0
    )
    half_spreads: dict[str, float] = _field(
        {},
        "Half-spreads by name",
        "Half-spreads of single assets or factors, in place of the two above.",
        unit="bp",
    )

    @field_validator("half_spreads")
    @classmethod
    def _not_negative(cls, value: dict[str, float]) -> dict[str, float]:
        for name, spread in value.items():
            if spread < 0:
                raise ValueError(f"the half-spread of '{name}' is {spread:g} bp; a cost cannot be negative")
        return value


class HedgeSettings(ChoiceGroup):
    """Choices of the hedge and its walk-forward test."""

    beta: HedgeBeta = _field(HedgeBeta.PLAIN, "Hedge betas", "How the hedge betas are estimated.")
    window_kind: WindowKind = _field(WindowKind.ROLLING, "Window", "Rolling or expanding estimation window.")
    window: int = _field(
        60, "Window length", "Periods in the estimation window.", unit="periods", slider=(24, 120, 6), ge=3
    )
    hold: int = _field(
        1,
        "Hold",
        "Periods a hedge is held before it is estimated again.",
        unit="periods",
        slider=(1, 12, 1),
        ge=1,
    )
    lag: int = _field(
        0,
        "Trading lag",
        "Whole periods between the end of the window and the first trade.",
        unit="periods",
        slider=(0, 3, 1),
        ge=0,
    )
    dimson_lags: int = _field(
        1, "Dimson lags", "Lagged factor returns that enter the Dimson sum.", slider=(1, 3, 1), ge=1, le=12
    )
    ridge: float = _field(
        0.1,
        "Ridge",
        "Ridge penalty as a share of the factors' average variance times the window.",
        slider=(0, 1, 0.05),
        ge=0,
    )
    gross_cap: float | None = _field(
        None,
        "Gross cap",
        "Largest sum of absolute hedge weights per unit of the asset; none if empty.",
        slider=(0, 5, 0.1),
        ge=0,
    )
    leg_cap: float | None = _field(
        None, "Leg cap", "Largest absolute weight of one hedge leg; none if empty.", slider=(0, 3, 0.1), ge=0
    )
    drop_legs: bool = _field(
        False,
        "Drop costly legs",
        "Drop a leg whose cost exceeds what it saves in risk at the stated risk aversion.",
    )
    risk_aversion: float = _field(
        3.0,
        "Risk aversion",
        "Price of variance when a leg's saving is held against its cost.",
        slider=(1, 10, 0.5),
        gt=0,
    )


class Settings(ChoiceGroup):
    """Every choice of a study.

    All fields have defaults; change by copy with :meth:`changed`. Ceilings and costs are as a person types them: annual.

    Raises
    ------
    SettingError
        From :meth:`changed`, :meth:`from_dict` and :meth:`load`, for an unknown name or a value out of range.
    """

    start: date | None = _field(
        None, "From", "First month of the sample; the earliest date in the data if empty."
    )
    end: date | None = _field(None, "To", "Last month of the sample; the latest date in the data if empty.")
    factors: tuple[str, ...] | None = _field(
        None, "Factors", "Factors of the regression, in order; all traded factors if empty."
    )
    assets: tuple[str, ...] | None = _field(None, "Assets", "Assets under test, in order; all if empty.")
    factor_sets: dict[str, tuple[str, ...]] = _field({}, "Factor sets", "Named lists of factors to compare.")
    histories: Histories = _field(
        Histories.COMMON, "Histories", "One common sample for all assets, or each asset on its own history."
    )
    error_type: ErrorType = _field(
        ErrorType.CLASSICAL, "Standard errors", "Standard errors of the regressions."
    )
    lag_rule: LagRule = _field(
        LagRule.RULE_OF_THUMB, "Lag rule", "How the number of Newey-West lags is chosen."
    )
    lags: int = _field(6, "Lags", "Newey-West lags when the rule is 'fixed'.", slider=(0, 24, 1), ge=0)
    reference: Reference = _field(
        Reference.STUDENT_T, "Reference", "Reference distribution of t ratios under robust errors."
    )
    level: float = _field(
        0.95, "Confidence", "Coverage of every interval.", slider=(0.80, 0.99, 0.01), gt=0, lt=1
    )
    ceiling: float = _field(
        1.0,
        "Sharpe ceiling",
        "Highest Sharpe ratio, a year, that this market could sustain.",
        unit="a year",
        slider=(0.0, 3.0, 0.01),
        ge=0,
    )
    ceiling_form: CeilingForm = _field(
        CeilingForm.ON_FACTORS, "Ceiling binds", "Which portfolio the ceiling binds."
    )
    trials: int = _field(
        1,
        "Trials",
        "Strategies or specifications tried to arrive at these; enters every adjusted figure.",
        slider=(1, 1000, 1),
        ge=1,
    )
    power_sharpe: float = _field(
        1.0,
        "Power against",
        "Sharpe ratio a year of the best combination against which the joint test's power is stated.",
        unit="a year",
        slider=(0.0, 3.0, 0.05),
        ge=0,
    )
    bootstrap_draws: int = _field(
        2000, "Bootstrap draws", "Number of bootstrap samples.", ge=99, le=1_000_000
    )
    seed: int = _field(20240229, "Seed", "Seed of every random draw.", ge=0)
    cross_section: CrossSectionSettings = Field(default_factory=CrossSectionSettings)
    hedge: HedgeSettings = Field(default_factory=HedgeSettings)
    costs: CostSettings = Field(default_factory=CostSettings)

    @model_validator(mode="after")
    def _dates_in_order(self) -> Self:
        if self.start and self.end and self.start > self.end:
            raise ValueError(f"the sample starts on {self.start} but ends on {self.end}")
        return self

    def changed(self, values: Mapping[str, Any] | None = None, /, **more: Any) -> Settings:
        """Return a copy with some values changed and everything validated again.

        Parameters
        ----------
        values : mapping, optional
            Dotted names and values, such as ``{"hedge.window": 48}``.
        **more
            The same for top-level names.

        Raises
        ------
        SettingError
            For an unknown name, with the nearest known one, or a value out of range.
        """
        state = self.to_dict()
        known = [name for name, _ in type(self).fields()]
        for name, value in {**(values or {}), **more}.items():
            if name not in known and name not in state:
                raise SettingError(f"There is no setting '{name}'", remedy=nearest(name, known))
            *groups, last = name.split(".")
            place = state
            for group in groups:
                place = place[group]
            place[last] = value
        return type(self).from_dict(state)

    def get(self, name: str) -> Any:
        """Value of a setting by its dotted name."""
        type(self).note(name)
        value: Any = self
        for part in name.split("."):
            value = getattr(value, part)
        return value

    def to_dict(self) -> dict[str, Any]:
        """Nested plain values."""
        return self.model_dump(mode="python")

    @classmethod
    def from_dict(cls, values: Mapping[str, Any]) -> Settings:
        """Settings from nested plain values; what is not named keeps its default.

        Raises
        ------
        SettingError
            For an unknown name or a value out of range.
        """
        try:
            return cls.model_validate(dict(values))
        except ValidationError as error:
            raise _explained(error) from error

    def save(self, path: str | Path) -> Path:
        """Write the settings as a TOML file; empty settings are left out."""
        import tomlkit

        target = Path(path)
        target.write_text(tomlkit.dumps(_without_none(self.model_dump(mode="python"))), encoding="utf-8")
        return target

    @classmethod
    def load(cls, path: str | Path) -> Settings:
        """Read settings from a TOML file.

        Raises
        ------
        SettingError
            If the file is missing, is not TOML, or holds an unknown name or a value out of range.
        """
        try:
            values = tomllib.loads(Path(path).read_text(encoding="utf-8-sig"))
        except (OSError, UnicodeDecodeError) as error:
            raise SettingError(f"The settings file '{path}' cannot be read ({error})") from error
        except tomllib.TOMLDecodeError as error:
            raise SettingError(f"The settings file '{path}' is not TOML: {error}") from error
        return cls.from_dict(values)


def _without_none(values: Mapping[str, Any]) -> dict[str, Any]:
    kept: dict[str, Any] = {}
    for name, value in values.items():
        if isinstance(value, Mapping):
            kept[name] = _without_none(value)
        elif isinstance(value, StrEnum):
            kept[name] = str(value)
        elif isinstance(value, tuple):
            kept[name] = list(value)
        elif value is not None:
            kept[name] = value
    return kept


def _explained(error: ValidationError) -> SettingError:
    """One SettingError that names each fault in the analyst's words."""
    known = [name for name, _ in Settings.fields()]
    faults: list[str] = []
    for item in error.errors():
        name = ".".join(str(part) for part in item["loc"])
        if item["type"] == "extra_forbidden":
            faults.append(f"there is no setting '{name}' ({nearest(name, known)})")
        elif name:
            faults.append(f"'{name}' is {item['input']!r}: {item['msg'].removeprefix('Value error, ')}")
        else:
            faults.append(item["msg"].removeprefix("Value error, "))
    return SettingError("; ".join(faults))
