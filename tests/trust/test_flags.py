import json
import string

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from ramulus.trust.flags import FLAG_RULES, SEVERITIES, raise_flags, rule_of


def test_each_code_and_each_fact_stands_once():
    assert len({rule.code for rule in FLAG_RULES}) == len(FLAG_RULES)
    assert len({rule.fact for rule in FLAG_RULES}) == len(FLAG_RULES)


@pytest.mark.parametrize("rule", FLAG_RULES, ids=lambda rule: rule.code)
def test_each_rule_is_complete(rule):
    ranks = [SEVERITIES.index(severity) for severity, _ in rule.limits]
    assert ranks == sorted(set(ranks))
    limits = [limit for _, limit in rule.limits]
    assert limits == sorted(limits, reverse=rule.side == "below")
    fields = {field for _, field, _, _ in string.Formatter().parse(rule.message) if field}
    assert fields <= {"value", "percent"}
    assert not rule.message.endswith(".")
    assert rule.source
    assert rule.unit
    assert rule.section


@pytest.mark.parametrize("rule", FLAG_RULES, ids=lambda rule: rule.code)
def test_a_value_on_the_limit_passes_and_one_beyond_it_is_flagged(rule):
    sign = 1 if rule.side == "above" else -1
    mildest = rule.limits[0][1]
    assert raise_flags({rule.fact: mildest}) == []
    for severity, limit in rule.limits:
        beyond = limit + sign * 1e-6 * max(abs(limit), 1.0)
        (flag,) = raise_flags({rule.fact: beyond})
        assert (flag.code, flag.severity, flag.limit, flag.value) == (
            rule.code, severity, limit, beyond,
        )  # fmt: skip
        assert "{" not in flag.message


def test_one_fact_raises_only_its_most_severe_flag():
    (flag,) = raise_flags({"unresolved_share": 0.7})
    assert (flag.severity, flag.limit) == ("reject", 0.5)
    assert flag.message.startswith("70 % of the length")


def test_flags_come_most_severe_first():
    facts = {"blur_assumed": 1.0, "anisotropy": 4.0, "saturated_share": 0.5, "bridged": 2.0}
    severities = [flag.severity for flag in raise_flags(facts)]
    assert severities == ["reject", "check", "check", "note"]


@pytest.mark.parametrize("value", [None, float("nan"), float("inf"), -float("inf"), "wide", []])
def test_what_is_not_known_raises_nothing(value):
    assert raise_flags({rule.fact: value for rule in FLAG_RULES}) == []
    assert raise_flags({}) == []
    assert raise_flags({"no_such_fact": 1e9}) == []


def test_numpy_numbers_are_judged_too_and_become_plain_ones():
    assert [f.code for f in raise_flags({"bridged": np.int64(2)})] == ["bridges"]
    (flag,) = raise_flags({"anisotropy": np.float32(4.0)})
    assert json.loads(json.dumps(flag.to_json())) == {
        "code": "anisotropy", "severity": "check", "value": 4.0, "limit": 3.0,
        "message": "the voxels are 4 times longer along one axis than along another; radii of thin"
        " vessels rest on the model of the blur",
    }  # fmt: skip


@given(st.dictionaries(st.sampled_from([r.fact for r in FLAG_RULES]), st.floats(-1e6, 1e6)))
def test_more_facts_never_silence_a_flag(facts):
    all_flags = raise_flags(facts)
    for fact, value in facts.items():
        assert all(flag in all_flags for flag in raise_flags({fact: value}))


def test_a_rule_is_found_by_its_code():
    assert rule_of("noise").fact == "contrast_to_noise"
    with pytest.raises(KeyError):
        rule_of("no such code")
