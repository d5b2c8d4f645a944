"""The fingerprint: what changes results changes it, and nothing else does."""

from dataclasses import replace

import numpy as np
import pytest
from sweep import small

from roa.errors import UserError
from roa.kernel import lane_source
from roa.kernel.target import Target
from roa.sweep import fingerprint
from roa.sweep import plan as planning
from roa.sweep.header import Header


def test_same_study_same_fingerprint(plan):
    assert small.make().fingerprint == plan.fingerprint
    assert len(plan.fingerprint) == 64


@pytest.mark.parametrize(
    "other", [{"samples": 1000}, {"sweep": "horizon = 10"}, {"sweep": "horizon = 10.0\nsamples = 77"}]
)
def test_unchanged(plan, other):
    assert small.make(**other).fingerprint == plan.fingerprint


def test_title_and_verdict_do_not_count(plan):
    resolved = plan.configuration.resolved()
    changed = resolved | {"verdict": {"confidence": 0.9}, "title": "another"}
    assert changed != resolved
    assert fingerprint.configuration_parts(changed) == fingerprint.configuration_parts(resolved)


@pytest.mark.parametrize(
    ("other", "key"),
    [
        ({"seed": 2}, "config.sweep.seed"),
        ({"block_size": 128}, "block_size"),
        ({"level": 0.2}, "target.level"),
        ({"sweep": "horizon = 10.5"}, "config.sweep.horizon"),
        ({"sweep": "horizon = 10.0\nrtol = 1e-7"}, "config.sweep.rtol"),
        ({"sweep": "horizon = 10.0\nescape = 9.0"}, "config.sweep.escape"),
        ({"sweep": 'horizon = 10.0\ndesign = "grid"'}, "config.sweep.design"),
        ({"sweep": 'horizon = 10.0\nmethod = "tsitouras5"'}, "config.sweep.method"),
    ],
)
def test_changed(plan, other, key):
    new = small.make(**other)
    assert new.fingerprint != plan.fingerprint
    assert any(
        line.startswith(f"{key}: ") for line in fingerprint.differences(plan.fingerprint_parts, new.fingerprint_parts)
    )


def test_every_field_of_the_target_that_decides_counts():
    target = Target("ball", np.zeros(2), np.ones(2), radius=1e-3, dwell=5.0)
    others = {
        "kind": "level", "centre": np.full(2, 1e-300), "half_widths": np.full(2, 2.0), "P": np.eye(2), "level": 1.0,
        "radius": 2e-3, "dwell": 6.0, "elsewhere": np.ones((1, 2)),
    }  # fmt: skip
    assert {*others, "note", "residual"} == set(Target.__dataclass_fields__)  # these two are words alone
    for name, value in others.items():
        parts = fingerprint.target_parts(replace(target, **{name: value}))
        lines = fingerprint.differences(fingerprint.target_parts(target), parts)
        assert [line.split(":")[0] for line in lines] == [f"target.{name}"]


def test_versions_count(plan, monkeypatch):
    monkeypatch.setattr(fingerprint, "version", lambda package: "0.0.0")
    monkeypatch.setattr(fingerprint, "__version__", "0.0.0")
    new = small.make()
    lines = fingerprint.differences(plan.fingerprint_parts, new.fingerprint_parts)
    assert [line.split(":")[0] for line in lines] == [f"version.{name}" for name in ("numba", "numpy", "roa", "scipy")]


def test_generated_code_counts(plan, monkeypatch):
    monkeypatch.setattr(lane_source, "LANES", 64)
    lines = fingerprint.differences(plan.fingerprint_parts, small.make().fingerprint_parts)
    assert [line.split(":")[0] for line in lines] == ["kernel"]


def test_step_cap_counts(plan, monkeypatch):
    integration_of = planning.integration_of
    monkeypatch.setattr(planning, "integration_of", lambda table: replace(integration_of(table), step_cap=1000))
    lines = fingerprint.differences(plan.fingerprint_parts, small.make().fingerprint_parts)
    assert lines == ["step_cap: 200000 -> 1000"]


def test_points_of_a_grid_count():
    grids = [small.make(samples=samples, sweep='design = "grid"') for samples in (100, 120, 121)]
    assert grids[0].fingerprint == grids[1].fingerprint  # both have 10 by 10 points
    assert [grid.samples for grid in grids] == [100, 100, 121]
    assert grids[1].fingerprint != grids[2].fingerprint


def test_differences_show_old_and_new():
    old = {"a": 1, "b": [1.5], "gone": "x", "same": None}
    new = {"a": 2, "b": [2.5], "here": None, "same": None}
    assert fingerprint.differences(old, new) == [
        "a: 1 -> 2", "b: [1.5] -> [2.5]", 'gone: "x" -> absent', "here: absent -> null",
    ]  # fmt: skip


def test_digest_is_sha256_of_canonical_json():
    # computed independently: printf '%s' '{"a":[1.5,null],"b":"x"}' | sha256sum
    sha256 = "b5441fc84cb1455fabdd993034f6db0a74b20f0545979ebc837595dab18f6cb9"
    assert fingerprint.digest({"b": "x", "a": [1.5, None]}) == sha256


def test_resume_onto_another_study_lists_each_key(tmp_path):
    path = small.sweep(tmp_path / "run").path
    before = small.datasets(path / "sweep.h5")
    with pytest.raises(UserError) as refused:
        small.sweep(path, plan=small.make(seed=2, sweep="horizon = 10.0\nrtol = 1e-5"))
    assert len(refused.value.faults) == 2
    assert "config.sweep.rtol: 1e-06 -> 1e-05" in refused.value.faults[0]
    assert "config.sweep.seed: 1 -> 2" in refused.value.faults[1]
    assert small.datasets(path / "sweep.h5") == before


@pytest.mark.parametrize(("key", "value"), [("samples", 0), ("samples", 2**40 + 1), ("seed", -1), ("seed", 2**63)])
def test_overrides_out_of_range(key, value):
    with pytest.raises(UserError, match=f"--{key}"):
        small.make(**{key: value})


def test_overrides_hold_for_the_plan():
    plan = small.make(samples=77, seed=9)
    assert (plan.samples, plan.configuration.sweep.samples, plan.configuration.sweep.seed) == (77, 77, 9)
    assert Header.of(plan).seed == 9
