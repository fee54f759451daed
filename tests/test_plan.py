"""The plan: written out, read back, and strict about what it holds."""

from __future__ import annotations

import json
import tomllib

import pytest
from hypothesis import given
from hypothesis import strategies as st

from twicetold.errors import PlanError
from twicetold.plan import Plan, plan_from_mapping, read_plan, recorded_order
from twicetold.run import rules_of


def test_the_written_plan_reads_back_equal(tmp_path):
    plan = Plan().replace(
        graph__rule="within:800",
        spread__turnover=0.9,
        catalogue__presence={"ph_1": ("yes", 'q"uo\\te'), "x y": ("1",)},
        evidence__worlds=("emergence",),
        sensitivity__exponents=(0.0, 2.5),
    )
    file = tmp_path / "plan.toml"
    file.write_text(plan.to_toml(), encoding="utf-8")
    assert read_plan(file) == plan
    assert read_plan(file).digest() == plan.digest()


def test_every_key_is_explained_in_the_file():
    text = Plan().to_toml()
    for name, _, explanation in Plan().choices():
        key = name.split(".")[1]
        assert f"# {explanation}\n{key} = " in text


def test_defaults_are_those_of_the_design():
    raw = tomllib.loads(Plan().to_toml())
    assert raw["graph"] == {"rule": "nearest:6", "bridges": True}
    assert raw["emergence"]["propensity"] == "effort"
    assert raw["evidence"]["draws"] == 99_999
    assert raw["evidence"]["alpha"] == 0.05
    assert raw["spread"]["min_holders"] == 3


@pytest.mark.parametrize(
    ("toml", "words"),
    [
        ("[evidence]\ndrwas = 3", "Did you mean 'draws'"),
        ("[evidnce]\ndraws = 3", "Did you mean 'evidence'"),
        ("evidence = 3", "must be a section"),
        ("[evidence]\ndraws = 3.5", "whole number"),
        ("[evidence]\ndraws = true", "whole number"),
        ("[evidence]\ndraws = 3", "from 99"),
        ("[evidence]\nalpha = nan", "a number"),
        ("[evidence]\nworlds = 'emergence'", "list of texts"),
        ("[evidence]\nworlds = ['emergense']", "emergence, ancestry"),
        ("[evidence]\nworlds = []", "at least one"),
        ("[graph]\nrule = 'nearest:x'", "nearest:K"),
        ("[graph]\nbridges = 1", "true or false"),
        ("[spread]\nturnover = 1.5", "below 1"),
        ("[spread]\nturnover = 'guess'", "a number or a range"),
        ("[spread]\nturnover = [0.9]", "two numbers"),
        ("[spread]\nturnover = [0.9, 0.8]", "lower one first"),
        ("[spread]\nturnover = [0.9, 1.0]", "below 1"),
        ("[spread]\nturnover = [0.9, 'x']", "list of numbers"),
        ("[emergence]\npropensity = 'covariates'", "at least one column"),
        ("[catalogue]\npresence = 'some'", "or a table"),
        ("not toml", "not valid TOML"),
    ],
)
def test_a_wrong_plan_is_refused_with_what_to_do(tmp_path, toml, words):
    file = tmp_path / "plan.toml"
    file.write_text(toml)
    with pytest.raises(PlanError, match=words) as err:
        read_plan(file)
    assert "plan.toml" in str(err.value)


def test_a_plan_that_is_not_there_or_not_text(tmp_path):
    with pytest.raises(PlanError, match="cannot be read"):
        read_plan(tmp_path / "none.toml")
    (tmp_path / "bytes.toml").write_bytes(b"\xff\xfe[evidence]")
    with pytest.raises(PlanError, match="UTF-8"):
        read_plan(tmp_path / "bytes.toml")
    with pytest.raises(PlanError, match="cannot be read"):
        read_plan(tmp_path)


@given(
    st.dictionaries(
        st.sampled_from(["graph", "evidence", "spread", "x", ""]),
        st.dictionaries(
            st.sampled_from(["rule", "draws", "turnover", "seed", "alpha", "y"]),
            st.one_of(st.none(), st.booleans(), st.integers(), st.floats(), st.text(max_size=5)),
        )
        | st.integers(),
    )
)
def test_any_mapping_gives_a_plan_or_a_plan_error(raw):
    try:
        plan = plan_from_mapping(raw)
    except PlanError:
        return
    assert plan_from_mapping(tomllib.loads(plan.to_toml())) == plan


def test_a_range_of_turnovers_is_written_and_read_again(tmp_path):
    plan = Plan().replace(spread__turnover=(0.95, 0.99))
    assert "turnover = [0.95, 0.99]" in plan.to_toml()
    file = tmp_path / "plan.toml"
    file.write_text(plan.to_toml())
    assert read_plan(file) == plan
    record = json.loads(json.dumps({"plan": plan.to_mapping(), "by": "evidence", "seed": 1}))
    (tmp_path / "run.json").write_text(json.dumps(record))
    assert read_plan(tmp_path / "run.json") == plan


class TestRunRecord:
    """A run.json stands for the plan it holds."""

    def test_gives_its_plan_and_order(self, tmp_path):
        plan = Plan().replace(graph__rule="gabriel", sensitivity__exponents=(0.0, 2.5))
        file = tmp_path / "run.json"
        file.write_text(json.dumps({"plan": plan.to_mapping(), "by": "moran_i", "seed": 1}))
        assert read_plan(file) == plan
        assert recorded_order(file) == "moran_i"

    def test_a_plan_in_toml_records_no_order(self, tmp_path):
        file = tmp_path / "plan.toml"
        file.write_text(Plan().to_toml())
        assert recorded_order(file) is None

    @pytest.mark.parametrize(
        ("text", "words"),
        [
            ("{", "not valid JSON"),
            ("{}", 'must hold a "plan"'),
            ('{"plan": 3}', 'must hold a "plan"'),
            ("[1]", "not valid TOML|unknown|Unknown"),
            ('{"plan": {"evidence": {"drwas": 3}}}', "Did you mean 'draws'"),
            ('{"plan": {"evidence": {"alpha": NaN}}}', "a number"),
            ('{"plan": {"evidence": {"draws": null}}}', "whole number"),
            ("{" * 100_000, "not valid JSON"),
            ('{"plan":' * 100_000, "not valid JSON"),
        ],
    )
    def test_a_broken_record_is_refused(self, tmp_path, text, words):
        file = tmp_path / "run.json"
        file.write_text(text)
        with pytest.raises(PlanError, match=words) as err:
            read_plan(file)
        assert "run.json" in str(err.value)


def test_columns_that_play_a_part_are_named_and_not_empty():
    rules = rules_of(Plan().replace(catalogue__family="stock", catalogue__region="island"))
    assert (rules.family, rules.region) == ("stock", "island")
    assert (rules.effort, rules.branch) == ("", "")
    for part in ("effort", "family", "branch", "region"):
        with pytest.raises(PlanError, match=rf"catalogue\.{part}` must name a column"):
            Plan().replace(**{f"catalogue__{part}": " "})
