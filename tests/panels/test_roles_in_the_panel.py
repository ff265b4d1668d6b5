"""Roles changed in the intake panel: the sources are read again and every panel follows, or nothing changes."""

from __future__ import annotations

from collections.abc import Iterator

import pytest

from soffit.demo import demo_study
from soffit.intake import Role
from soffit.panels import CeilingPanel, IntakePanel, Session
from soffit.study import Study


@pytest.fixture
def panels() -> Iterator[tuple[Study, IntakePanel, CeilingPanel]]:
    study = demo_study()
    intake, ceiling = IntakePanel(study), CeilingPanel(study)
    yield study, intake, ceiling
    intake.close()
    ceiling.close()


def _ask(panel: IntakePanel, series: str, role: Role) -> None:
    panel._series.value = series
    panel._role.value = role
    panel._read_again.click()


def test_an_ignored_series_leaves_every_panel_and_can_come_back(
    panels: tuple[Study, IntakePanel, CeilingPanel],
) -> None:
    study, intake, ceiling = panels
    computed = ceiling.computed
    _ask(intake, "Oak Government Bond", Role.IGNORED)
    assert intake.session.problem == ""
    assert "Oak Government Bond" not in intake.session.study.panel.assets
    assert " of 13 alphas" in ceiling._finding.text
    assert ceiling.computed == computed + 1
    assert "Oak Government Bond" in intake._series.options
    _ask(intake, "Oak Government Bond", Role.ASSET)
    assert " of 14 alphas" in ceiling._finding.text
    assert Session.of(study) is intake.session


def test_an_asset_becomes_a_factor(panels: tuple[Study, IntakePanel, CeilingPanel]) -> None:
    _, intake, _ = panels
    _ask(intake, "Sorrel Futures", Role.FACTOR)
    assert "Sorrel Futures" in intake.session.study.panel.factors
    assert intake.session.study.settings == intake.session.settings


def test_a_refused_role_changes_nothing_and_says_why(panels: tuple[Study, IntakePanel, CeilingPanel]) -> None:
    _, intake, ceiling = panels
    before = intake.session.study
    said = ceiling._finding.text
    _ask(intake, "Cash", Role.FACTOR)
    assert "'Cash' is both the risk-free return and declared traded factor" in intake.session.problem
    assert intake._role.value is Role.RISK_FREE
    assert intake.session.study is before
    assert ceiling._finding.text == said


def test_a_study_made_from_a_panel_cannot_be_read_again() -> None:
    study = Study(demo_study().panel)
    intake = IntakePanel(study)
    _ask(intake, "Cash", Role.IGNORED)
    assert "made from a panel, not from sources" in intake.session.problem
    intake.close()
