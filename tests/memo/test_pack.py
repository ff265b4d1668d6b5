"""The pack: order, numbers, captions, references, labels, cautions, sources, provenance."""

from __future__ import annotations

from collections.abc import Callable

import pytest

from soffit.errors import InputError, SettingError
from soffit.memo import Label, Pack
from soffit.memo.layout import Remark
from soffit.memo.text import Link, flat, plain, runs
from soffit.present.cautions import CAUTIONS, HEDGE_CAUTIONS
from soffit.present.kept import keep
from soffit.present.sources import SOURCES, reference
from soffit.present.spec import Exhibit
from soffit.study import Study

Make = Callable[..., Exhibit]


def test_figures_and_tables_are_numbered_through_in_reading_order(study: Study, make: Make) -> None:
    memo = Pack(study).keep(make(key="one")).keep(make(key="two")).keep(make(key="one")).lay_out()
    assert [figure.name for figure in memo.figures] == ["Figure 1", "Figure 2", "Figure 3"]
    assert [table.name for table in memo.tables] == [f"Table {n}" for n in range(1, 7)]
    assert len({figure.stem for figure in memo.figures}) == 3
    assert [section.number for section in memo.sections] == [1, 2, 3]


def test_moving_a_part_renumbers_and_references_follow(study: Study, make: Make) -> None:
    pack = Pack(study).keep(make(key="one")).keep(make(key="two")).say("See {two-figure} and {one-table}.")
    assert flat(pack.lay_out().body[-1].words) == "See Figure 2 and Table 1."
    pack.move(1, 0)
    assert pack.contents == ("two", "one", "words")
    assert flat(pack.lay_out().body[-1].words) == "See Figure 1 and Table 3."
    pack.drop(0)
    with pytest.raises(SettingError, match="two-figure"):
        pack.lay_out()


def test_captions_are_the_analysts_and_numbers_are_not(study: Study, make: Make) -> None:
    pack = Pack(study).keep(make(key="one"))
    pack.caption("one-figure", "What {one-table} says, drawn.")
    figure = pack.lay_out().figures[0]
    assert flat(figure.caption) == "What Table 1 says, drawn."
    assert Link("Table 1", "table-1") in figure.caption
    with pytest.raises(SettingError, match="did you mean 'one-figure'"):
        pack.caption("one-figur", "x")


def test_what_a_panel_kept_and_what_code_keeps_are_the_same(study: Study) -> None:
    from soffit.present.exhibits import build

    keep(study, build("ceiling", study))
    other = study.changed(ceiling=0.7)
    keep(other, build("ceiling", other))
    memo = Pack(study).keep("joint").lay_out()
    assert [section.heading for section in memo.sections[:2]] == [memo.sections[0].heading] * 2
    assert memo.sections[0].changes == ()
    assert memo.sections[1].changes == ("Sharpe ceiling: 0.7",)
    assert len(study.kept) == 2


def test_only_exhibits_of_the_same_data_can_be_kept(study: Study, pack: Pack) -> None:
    assets = study.panel.assets * 2
    other = Study.open(assets, study.panel.factors, units="decimal", excess=True)
    with pytest.raises(InputError, match="other data"):
        pack.keep("ceiling", study=other)
    with pytest.raises(InputError, match="str was kept"):
        Pack(_with_kept(study, "ceiling"))
    with pytest.raises(SettingError, match="nearest|did you mean 'ceiling'"):
        pack.keep("cieling")


def _with_kept(study: Study, item: object) -> Study:
    study.kept.append(item)
    return study


def test_an_empty_pack_is_refused(study: Study) -> None:
    with pytest.raises(InputError, match="Nothing was kept"):
        Pack(study).lay_out()
    with pytest.raises(SettingError, match="no part 0"):
        Pack(study).drop(0)


def test_labels_stand_under_the_title_and_cannot_contradict(study: Study, make: Make) -> None:
    pack = Pack(study, labels=[Label.INTERNAL]).keep(make(), labels=[Label.GROSS, Label.INTERNAL])
    memo = pack.lay_out()
    assert memo.label_line.startswith("For internal use · ")
    assert "not stated" in memo.label_line
    assert memo.sections[0].labels == (Label.GROSS,)
    with pytest.raises(SettingError, match="both gross and net"):
        Pack(study, labels=[Label.GROSS, Label.NET])


def test_cautions_are_always_there_and_hedges_bring_theirs(study: Study, make: Make) -> None:
    plain_memo = Pack(study).keep(make()).lay_out()
    hedge_memo = Pack(study).keep(make(key="hedge-ticket")).lay_out()
    assert plain_memo.cautions == CAUTIONS
    assert hedge_memo.cautions == CAUTIONS + HEDGE_CAUTIONS
    assert plain_memo.sections[0].cautions == (plain(make().cautions[0]),)
    words = " ".join(CAUTIONS).casefold()
    for needed in (
        "past returns",
        "judgement",
        "in sample",
        "hypothetical",
        "not investment advice",
        "compliance",
    ):
        assert needed in words
    hedge_words = " ".join(HEDGE_CAUTIONS).casefold()
    for needed in ("derivatives", "leverage", "short", "margin", "suits"):
        assert needed in hedge_words


def test_only_the_sources_that_were_used_are_cited(study: Study, make: Make) -> None:
    memo = Pack(study).keep(make()).lay_out()
    assert memo.references == tuple(sorted([reference("lo-2002"), reference("ross-1976")]))
    assert memo.sections[0].citations == (1, 2)
    assert len(memo.references) < len(SOURCES)


def test_provenance_tells_data_settings_seed_trials_versions_and_intake(study: Study, pack: Pack) -> None:
    page = pack.lay_out().provenance
    facts = dict(page.facts.rows)
    assert facts["Data fingerprint (SHA-256)"] == study.panel.fingerprint
    assert facts["Seed"] == str(study.settings.seed)
    assert facts["Trials stated"] == "1"
    assert "numpy" in facts["Versions"]
    titles = [table.title for table in page.tables]
    assert titles == ["Settings", "Rows at intake", "Intake record"]
    assert len(page.tables[0].rows) == len(list(type(study.settings).fields()))
    assert len(page.tables[2].rows) == len(study.record.entries)


def test_changed_settings_are_marked(study: Study) -> None:
    page = Pack(study.changed(ceiling=0.7)).keep("ceiling").lay_out().provenance
    rows = {row[0]: row for row in page.tables[0].rows}
    assert rows["ceiling"] == ("ceiling", "Sharpe ceiling", "0.7 a year", "changed")
    assert rows["seed"][3] == ""


def test_a_paragraph_with_braces_that_are_no_key_is_kept(study: Study, make: Make) -> None:
    memo = Pack(study).keep(make()).say("A set {1, 2} and { }.").lay_out()
    assert isinstance(memo.body[-1], Remark)
    assert flat(memo.body[-1].words) == "A set {1, 2} and { }."


# Directional controls close where they open: Unicode Standard Annex 9, rules BD9 to BD11.
@pytest.mark.parametrize(
    ("raw", "expected"),
    [
        ("a‮b", "a‮b‬"),
        ("a⁧b⁩c", "a⁧b⁩c"),
        ("a⁦‫b", "a⁦‫b‬⁩"),
        ("a‬b", "ab"),
        ("a\x00b\x07", "a�b�"),
        ("a\ud800b", "a�b"),
        (" a \n b\t ", "a b"),
        ("a b", "a b"),
    ],
)
def test_plain_text_is_one_line_and_keeps_its_direction_to_itself(raw: str, expected: str) -> None:
    assert plain(raw) == expected


def test_runs_keep_the_spaces_around_references() -> None:
    anchors = {"k": Link("Figure 1", "figure-1")}
    assert runs("see {k}, then {k}", anchors) == ("see ", anchors["k"], ", then ", anchors["k"])
    with pytest.raises(SettingError, match="not in the memo"):
        runs("see {kk}", anchors)
