"""Budget files: reading, every fault together, and the JSON."""

from __future__ import annotations

import json
import math

import invented_plans as invented
import pytest

from sampler.errors import InputError
from sampler.files.budget import budget_json, read_budget, read_position
from sampler.files.output import plan_json
from sampler.tasks.budget import Channel, Contributor, budget

GOOD = """
format = 1
name = "invented via"
via_um = 30
pad_um = 70.0
required_ring_um = 5
[[contributor]]
name = "exposure tool"
mean_um = -0.5
sigma_um = 0.8
[[contributor]]
name = "drill"
k_sigma_um = 6.0
[[contributor]]
name = "reading"
k_sigma_um = 0.5
coverage_factor = 2
[[contributor]]
name = "drift"
mean_um = 1.5
[channel]
pitch_um = 130
line_um = 8
space_um = 8
"""


def written(tmp_path, text):
    path = tmp_path / "budget.toml"
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    return path


def faults_of(path):
    with pytest.raises(InputError) as caught:
        read_budget(path)
    return caught.value.faults


def test_reads_every_key(tmp_path):
    read = read_budget(written(tmp_path, GOOD))
    assert (read.name, read.via_um, read.pad_um, read.ring_um, read.coverage_factor) == ("invented via", 30, 70, 5, 3)
    assert read.contributors == (Contributor("exposure tool", -0.5, 0.8), Contributor("drill", 0.0, 2.0),
                                 Contributor("reading", 0.0, 0.25), Contributor("drift", 1.5, 0.0))
    assert read.channel == Channel(130.0, 8.0, 8.0)
    assert read.warnings == ()
    assert len(read.source.sha256) == 64


def test_the_least_file(tmp_path):
    read = read_budget(written(tmp_path, b"\xef\xbb\xbfformat = 1\r\nvia_um = 9\r\npad_um = 12\r\n"))
    assert (read.name, read.contributors, read.channel, read.ring_um) == ("budget", (), None, 0.0)
    assert read.tolerance_um == 1.5


def test_coverage_factor_of_the_file_holds_for_k_sigma(tmp_path):
    read = read_budget(written(tmp_path, GOOD.replace("via_um", "coverage_factor = 2\nvia_um", 1)))
    assert read.contributors[1].sigma_um == 3.0


def test_lengths_in_mm_are_suspected(tmp_path):
    read = read_budget(written(tmp_path, "format = 1\nvia_um = 0.03\npad_um = 0.07"))
    assert "looks like mm" in read.warnings[0]


@pytest.mark.parametrize(("old", "new", "expected"), [
    ("pad_um", "pad_mm", 'pad_mm is not a known key; did you mean "pad_um"?'),
    ("via_um = 30", "", "via_um is missing; give the diameter of the via"),
    ("via_um = 30", "via_um = 80", "pad_um 70 is not larger than via_um 80; give a pad that is larger than its via, or swap"),
    ("via_um = 30", "via_um = 70", "pad_um 70 is not larger than via_um 70; give a pad that is larger than its via"),
    ("via_um = 30", "via_um = nan", "via_um is nan; give a finite number"),
    ("via_um = 30", "via_um = 1e300", "via_um is 1e+300; give a finite number above 0 and of at most 1e+09"),
    ("via_um = 30", "via_um = true", "via_um is true"),
    ("required_ring_um = 5", "required_ring_um = -5", "required_ring_um is -5; give a finite number of at least 0"),
    ("required_ring_um = 5", "coverage_factor = 0", "coverage_factor is 0; give a finite number above 0"),
    ("sigma_um = 0.8", "sigma_um = 0.8\nk_sigma_um = 2.4", "no. 1 has sigma_um and k_sigma_um; give one of them"),
    ("k_sigma_um = 6.0", "", "no. 2 has none of mean_um, sigma_um, k_sigma_um; give at least one"),
    ("k_sigma_um = 0.5", "sigma_um = 0.5", "no. 3 has coverage_factor without k_sigma_um"),
    ("sigma_um = 0.8", "sigma_um = -0.8", "sigma_um is -0.8; give a finite number of at least 0"),
    ('name = "drill"', 'name = "drift"', 'no. 4 name "drift" is also the name of [[contributor]] no. 2'),
    ('name = "drill"', "", "no. 2 name is missing; give a name of its own"),
    ("pitch_um = 130", "pitch_um = 70", "[channel] pitch_um 70 is not larger than pad_um 70"),
    ("pitch_um = 130", "", "[channel] pitch_um is missing"),
    ("[channel]", "[chanel]", 'chanel is not a known key; did you mean "channel"?'),
    ("[[contributor]]\nname = \"drift\"\nmean_um = 1.5", "contributor = 5", "contributor is not a known key"),
    ("format = 1", "format = 2", "format is 2, which this version does not know"),
])
def test_each_fault_is_named(tmp_path, old, new, expected):
    assert old in GOOD
    found = faults_of(written(tmp_path, GOOD.replace(old, new, 1)))
    assert any(expected in fault for fault in found), found
    assert all(fault.startswith(str(tmp_path)) for fault in found)


def test_all_faults_come_together(tmp_path):
    text = (GOOD.replace("sigma_um = 0.8", "sigma_um = inf").replace("line_um = 8", "line = 8").replace("pad_um", "pda_um"))
    found = faults_of(written(tmp_path, text))
    assert len(found) == 3


@pytest.mark.parametrize(("content", "expected"), [
    (b"", "the file is empty"), (b"\0\1\2\3", "binary"), (b"via = = 3", "not TOML"), (b"\xff\xfe\xfa", "not UTF-8")])
def test_files_that_are_no_budget(tmp_path, content, expected):
    found = faults_of(written(tmp_path, content))
    assert len(found) == 1
    assert expected in found[0]


def test_missing_file_and_folder(tmp_path):
    assert "no such file" in faults_of(tmp_path / "none.toml")[0]
    assert "this is a folder" in faults_of(tmp_path)[0]


def test_position_of_a_written_plan(tmp_path):
    plan = invented.first_plan()
    (tmp_path / "plan.json").write_text(plan_json(plan), encoding="utf-8")
    k_u, k = read_position(tmp_path / "plan.json")
    assert (k_u, k) == (plan.audit.worst_position.predicted, 3.0)


@pytest.mark.parametrize(("content", "expected"), [
    ("{}", "no worst_position"), ("[]", "no worst_position"), ("{", "no worst_position"), ("", "empty"),
    ('{"worst_position": {"predicted": "x"}, "coverage_factor": 3}', "no worst_position"),
    ('{"worst_position": {"predicted": 1}, "coverage_factor": 0}', "no worst_position"),
    ('{"worst_position": {"predicted": 1}, "coverage_factor": 3, "status": "cannot"}', "cannot be met")])
def test_files_that_hold_no_position(tmp_path, content, expected):
    with pytest.raises(InputError, match=expected):
        read_position(written(tmp_path, content))


def test_position_that_is_not_determined(tmp_path):
    path = written(tmp_path, '{"worst_position": {"predicted": null}, "coverage_factor": 2}')
    assert read_position(path) == (math.inf, 2.0)


@pytest.mark.parametrize("k_u", [None, 2.0, 13.0, math.inf])
@pytest.mark.parametrize("pad", ["70.0", "50", "36"])
def test_json_is_strict_and_says_the_same(tmp_path, k_u, pad):
    result = budget(read_budget(written(tmp_path, GOOD.replace("70.0", pad))), k_u)
    content = json.loads(budget_json(result), parse_constant=lambda name: pytest.fail(name))
    assert content["position_limit_um"] == (None if result.spent else result.position_limit_um)
    assert content["spent_without_sampling"] == result.spent
    assert [item["name"] for item in content["contributors"]] == ["exposure tool", "drill", "reading", "drift"]
    assert (content["plan"] is None) == (k_u is None)
    if k_u is not None:
        assert content["plan"]["fits"] == result.fits
        assert (content["plan"]["smallest_pad_um"] is None) == math.isinf(k_u)
    assert (content["blame"] is None) == (not result.spent)
