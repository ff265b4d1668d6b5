"""Settings: one record, change by copy, TOML there and back, refusals that name the nearest."""

from __future__ import annotations

from datetime import date
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st
from pydantic import ValidationError

from soffit.errors import SettingError
from soffit.settings import CeilingForm, ErrorType, HedgeBeta, Histories, Settings


def test_change_is_a_copy() -> None:
    base = Settings()
    other = base.changed({"hedge.window": 48}, ceiling=0.8, error_type="HAC")
    assert (base.ceiling, base.hedge.window, base.error_type) == (1.0, 60, ErrorType.CLASSICAL)
    assert (other.ceiling, other.hedge.window, other.error_type) == (0.8, 48, ErrorType.HAC)
    with pytest.raises(ValidationError, match="frozen"):
        base.ceiling = 2.0  # type: ignore[misc]


@pytest.mark.parametrize(
    ("values", "message"),
    [
        ({"cieling": 1.0}, "no setting 'cieling'.*did you mean 'ceiling'"),
        ({"hedge.windw": 48}, "no setting 'hedge.windw'.*'hedge.window'"),
        ({"ceiling": -0.1}, "'ceiling' is -0.1.*greater than or equal to 0"),
        ({"ceiling": float("nan")}, "'ceiling' is nan"),
        ({"ceiling": "high"}, "'ceiling' is 'high'"),
        ({"error_type": "HC9"}, "'error_type' is 'HC9'.*HC3"),
        ({"level": 1.0}, "'level' is 1.0"),
        ({"trials": 0}, "'trials' is 0"),
        ({"start": date(2020, 1, 1), "end": date(2019, 1, 1)}, "starts on 2020-01-01 but ends on 2019-01-01"),
        ({"costs.half_spreads": {"Elm": -1.0}}, "half-spread of 'Elm' is -1 bp"),
    ],
)
def test_refusals_say_what_came_and_what_is_allowed(values: dict[str, object], message: str) -> None:
    with pytest.raises(SettingError, match=f"(?s){message}"):
        Settings().changed(values)


def test_unknown_names_in_a_file_are_refused(tmp_path: Path) -> None:
    file = tmp_path / "study.toml"
    file.write_text("ceiling = 0.8\nerror_typ = 'HAC'\n")
    with pytest.raises(SettingError, match="'error_typ'.*'error_type'"):
        Settings.load(file)
    file.write_text("ceiling = = 1")
    with pytest.raises(SettingError, match="is not TOML"):
        Settings.load(file)
    with pytest.raises(SettingError, match="cannot be read"):
        Settings.load(tmp_path / "none.toml")


@given(
    ceiling=st.floats(0, 50),
    form=st.sampled_from(CeilingForm),
    beta=st.sampled_from(HedgeBeta),
    histories=st.sampled_from(Histories),
    start=st.none() | st.dates(date(1926, 1, 1), date(1990, 1, 1)),
    names=st.none() | st.lists(st.text(min_size=1), max_size=4, unique=True),
)
def test_toml_round_trip(
    tmp_path_factory: pytest.TempPathFactory,
    ceiling: float,
    form: CeilingForm,
    beta: HedgeBeta,
    histories: Histories,
    start: date | None,
    names: list[str] | None,
) -> None:
    before = Settings().changed(
        {
            "ceiling": ceiling,
            "ceiling_form": form,
            "hedge.beta": beta,
            "histories": histories,
            "start": start,
            "factors": names,
            "factor_sets": {"all": names or []},
        }
    )
    file = before.save(tmp_path_factory.mktemp("settings") / "study.toml")
    assert Settings.load(file) == before


def test_every_field_has_a_label_and_a_sentence() -> None:
    for name, _ in Settings.fields():
        note = Settings.note(name)
        assert note.label, name
        assert note.help.endswith("."), name
        if note.low is not None:
            assert note.high is not None
            assert note.step
            Settings().changed({name: type(Settings().get(name) or 0.0)(note.high)})


def test_note_of_an_unknown_field_is_refused() -> None:
    with pytest.raises(SettingError, match="'ceiling'"):
        Settings.note("ceilling")
