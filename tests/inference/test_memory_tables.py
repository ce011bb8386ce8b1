"""Tables of the past: as few columns as the limit allows, proved; padding and splitting change nothing."""

from dataclasses import replace

import jax.numpy as jnp
import numpy as np
import pandas as pd
import pytest
from inference._memory_twin import log_likelihood, twin_tracks
from inference._tiny_tracks import FIXES, fixes_table, write_tracks

from bayesrange import StudyError
from bayesrange.inference._memory_tables import (
    COLUMNS,
    TRACE_LIMIT,
    make_proved,
    make_step_data,
    pad_blocks,
    split_animals,
    surface_table,
)
from bayesrange.inference._prepare import prepare
from bayesrange.memory import BLOCK, StepParameters, animal_log_likelihood, exact_trace, step_log_likelihood, traces
from bayesrange.study import read_study


def parameters(animals, layers, decays, encoding_range=0.2, home=None):
    """Strong memories on a plain kernel, the animals a little apart."""
    one = np.ones(animals) * np.linspace(1, 1.1, animals)
    return StepParameters(
        shape=jnp.asarray(1.3 * one), scale=jnp.asarray(0.15 * one), concentration=jnp.asarray(0.3 * one),
        rhythm=jnp.asarray(np.outer(one, [0.1, -0.2, 0.05, 0.1])),
        selection=jnp.asarray(np.outer(one, np.linspace(0.5, -0.4, layers))),
        reference_strength=jnp.asarray(6 * one), reference_decay=jnp.asarray(decays[0] * one),
        working_strength=jnp.asarray(3 * one), working_decay=jnp.asarray(decays[1] * one),
        recall_half=jnp.asarray(one), encoding_range=jnp.asarray(float(encoding_range)), home_pull=jnp.asarray(2 * one),
        home=jnp.asarray(np.zeros((animals, 2)) if home is None else home), home_eps=jnp.asarray(0.05),
    )  # fmt: skip


def exactly(model, tracks, p):
    """Log-likelihood of each animal with traces summed directly."""
    found = []
    for k, (own, one) in enumerate(zip(tracks, model.task.extra["inputs"].animals, strict=True)):
        of = {
            "step_shape": p.shape[k], "step_scale": p.scale[k], "turn_concentration": p.concentration[k],
            "step_rhythm": p.rhythm[k], "selection": p.selection[k], "reference_strength": p.reference_strength[k],
            "reference_decay": p.reference_decay[k], "working_strength": p.working_strength[k],
            "working_decay": p.working_decay[k], "recall_half": p.recall_half[k], "encoding_range": p.encoding_range,
        }  # fmt: skip
        of = {name: np.asarray(value) for name, value in of.items()}
        found.append(log_likelihood(own, of, model.task.extra["inputs"].reference, 0.001, one.hour).sum())
    return np.array(found)


@pytest.mark.parametrize("decays", [(2000.0, 0.55), (60.0, 12.0), (400.0, 399.0)])
def test_error_of_the_chosen_columns_is_below_the_limit(pooled, pooled_tracks, decays):
    step = pooled.plan.scales.median_step_m / 1000
    p = parameters(4, 2, decays, step)
    error = np.asarray(animal_log_likelihood(p, pooled.data.steps)) - exactly(pooled, pooled_tracks, p)
    assert np.abs(error).max() < TRACE_LIMIT
    assert max(pooled.facts["trace_errors"]) < TRACE_LIMIT
    assert tuple(pooled.facts["columns"]) in COLUMNS


@pytest.mark.parametrize("share", [0.02, 0.5, 0.98])
def test_error_is_below_the_limit_at_any_estimated_encoding_range(estimated, share):
    low, high = np.log(estimated.plan.spec.range_limits)
    p = parameters(1, 0, (300.0, 5.0), np.exp(low + share * (high - low)))
    error = np.asarray(animal_log_likelihood(p, estimated.data.steps)) - exactly(
        estimated, twin_tracks(estimated, []), p
    )
    assert np.abs(error).max() < TRACE_LIMIT


def test_fewer_columns_would_miss_the_limit_by_far(pooled, pooled_tracks):
    # The proof can fail: what it measures grows once columns are taken away.
    inputs = replace(pooled.task.extra["inputs"], columns=(6, 1))
    p = parameters(4, 2, (2000.0, 0.55), pooled.plan.scales.median_step_m / 1000)
    few = animal_log_likelihood(p, make_step_data(inputs, 16))
    assert np.abs(np.asarray(few) - exactly(pooled, pooled_tracks, p)).max() > 10 * TRACE_LIMIT


def test_priors_that_reach_too_far_are_refused(pooled):
    # Decay times from a millionth of an hour on: no few columns hold them.
    inputs = replace(pooled.task.extra["inputs"], decays=(1e-2, 1e7))
    inputs = replace(inputs, animals=inputs.animals[:1], weight=(1.0,))
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr("bayesrange.inference._memory_tables.COLUMNS", ((3, 2), (4, 2)))
        with pytest.raises(
            StudyError, match=r"cannot be compressed to within 0.001 .* with 4 columns .* narrower priors"
        ):
            make_proved(inputs, 16)


def test_more_columns_are_taken_by_themselves(pooled):
    inputs = pooled.task.extra["inputs"]
    inputs = replace(inputs, animals=inputs.animals[:1], weight=(1.0,))
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr("bayesrange.inference._memory_tables.COLUMNS", ((3, 2), (4, 2), (22, 2)))
        chosen, data, proof = make_proved(inputs, 16)
    assert chosen.columns == (22, 2) and data.table_used.shape[-1] == 22
    assert max(proof.error) < TRACE_LIMIT


def test_range_columns_are_added_where_another_animal_than_the_longest_needs_them(pooled, monkeypatch):
    from bayesrange.inference import _memory_tables

    inputs = replace(pooled.task.extra["inputs"], ranges=(0.1, 0.3))
    monkeypatch.setattr(_memory_tables, "COLUMNS", ((3, 2), (4, 3), (5, 4)))
    asked = []

    def errors(inputs, animals, count, options):
        asked.append((inputs.columns, list(animals)))
        error = {(3, 2): 1e-6 if len(animals) == 1 else 1.0, (4, 3): 1e-6, (5, 4): 1e-6}
        made = [_memory_tables._tabulated(inputs, k, count, *_memory_tables.bases(inputs), ()) for k in animals]
        return made, [{option: error[option] for option in options} for _ in animals]

    monkeypatch.setattr(_memory_tables, "_errors", errors)
    chosen, data, _ = make_proved(inputs, 16)
    assert chosen.columns == (4, 3) and data.table_used.shape[-1] == 12
    assert asked == [((5, 4), [1]), ((3, 2), [0, 1, 2, 3]), ((4, 3), [0, 1, 2, 3])]  # old tom's record is the longest


def test_every_step_is_under_day_or_night(pooled):
    inputs = pooled.task.extra["inputs"]
    used, counted = np.asarray(pooled.data.steps.layers_used), np.asarray(pooled.data.steps.counted)
    day = np.concatenate([one.day for one in inputs.animals])
    assert pooled.plan.spec.layers == ("forage, day", "forage, night")
    assert 0.3 < day.mean() < 0.7
    assert (used[counted][day, 1] == 0).all() and (used[counted][~day, 0] == 0).all()
    assert (used[counted][day, 0] != 0).all() and (used[counted][~day, 1] != 0).all()
    nodes = np.asarray(pooled.data.steps.layers_nodes)[counted]
    assert (nodes[day][..., 1] == 0).all() and (nodes[~day][..., 0] == 0).all()
    together = make_step_data(replace(inputs, by_day=False), 16)
    np.testing.assert_array_equal(used.sum(-1), np.asarray(together.layers_used)[..., 0])


def test_padding_and_splitting_keep_the_log_likelihood_of_each_animal(pooled):
    p = parameters(4, 2, (300.0, 5.0))
    data = pooled.data.steps
    whole = np.asarray(animal_log_likelihood(p, data))
    assert {-(-(n - 1) // BLOCK) for n in FIXES.values()} == {2}
    padded = pad_blocks(data, data.animal.shape[0] + 3)
    assert padded.animal.shape[0] == data.animal.shape[0] + 3
    np.testing.assert_allclose(animal_log_likelihood(p, padded), whole, rtol=1e-12)
    alone = split_animals(pad_blocks(data, data.animal.shape[0] + 3))  # the first animal has the longer record now
    assert len({one.radius.shape for one in alone}) == 1
    for k, one in enumerate(alone):
        own = StepParameters(*(v if v.ndim == 0 else v[k : k + 1] for v in p))
        np.testing.assert_allclose(animal_log_likelihood(own, one), whole[k], rtol=1e-12)


def test_weights_multiply_the_log_likelihood_of_animals_that_travel_together(pooled):
    p, data = parameters(4, 2, (300.0, 5.0)), pooled.data.steps
    weighted = data._replace(weight=jnp.array([0.5, 0.5, 1.0, 1.0]))
    ratio = np.asarray(animal_log_likelihood(p, weighted)) / np.asarray(animal_log_likelihood(p, data))
    np.testing.assert_allclose(ratio, [0.5, 0.5, 1.0, 1.0])
    kept, _ = pooled.program.kind.derive(p, pooled.data._replace(steps=weighted))
    owner = np.asarray(data.animal)
    plain = np.asarray(step_log_likelihood(p, data))
    np.testing.assert_allclose(kept["log_likelihood"], plain * np.array([0.5, 0.5, 1, 1])[owner][:, None], rtol=1e-6)


def test_surface_is_the_past_at_the_last_fix(pooled):
    inputs, data = pooled.task.extra["inputs"], pooled.data
    decay, reach = data.steps.decay_basis, data.steps.range_basis
    x, y = np.array([500.7, 501.2]), np.array([5601.3, 5600.8])
    table = surface_table(inputs, x, y, decay, reach)
    for k, one in enumerate(inputs.animals):
        end, step = one.track.time[-1:], pooled.plan.scales.median_step_m / 1000
        ours = traces(jnp.asarray(table[k]), jnp.log(jnp.array([200.0, 4.0])), jnp.log(step), decay, reach)
        for i, tau in enumerate((200.0, 4.0)):
            exact = exact_trace(one.stays, end, x[None], y[None], tau, step)[0]
            # Proved to 1e-3 nats an animal; a trace of hours is held to about 1e-4 of an hour.
            np.testing.assert_allclose(ours[:, i], exact, atol=5e-4)


def test_surface_is_right_where_the_last_interval_is_the_shortest(tmp_path):
    # The age of the last stay at the last fix is an age like any other: the basis must reach it.
    fixes = fixes_table().reset_index(drop=True)
    last = fixes.index[fixes["animal"] == "vixen"][-1]
    late = pd.Timestamp(fixes.loc[last - 1, "time"]) + pd.Timedelta(minutes=2)
    fixes.loc[last, "time"] = late.strftime("%Y-%m-%dT%H:%MZ")
    fixes.loc[last, ["x", "y"]] = fixes.loc[last - 1, ["x", "y"]] + 10
    study = read_study(write_tracks(tmp_path, fixes, model={"pooling": "hierarchical"}))
    prepared = prepare(study)
    task = prepared.task
    one = {own.name: own for own in task.extra["inputs"].animals}["vixen"]
    assert one.stays.duration.min() < 0.1
    x, y = one.track.x[-2:-1], one.track.y[-2:-1]
    decay, reach = task.data.steps.decay_basis, task.data.steps.range_basis
    table = surface_table(replace(task.extra["inputs"], animals=(one,), weight=(1.0,)), x, y, decay, reach)
    step = prepared.plan.scales.median_step_m / 1000
    ours = traces(jnp.asarray(table[0]), jnp.log(jnp.array([200.0, 1.0])), jnp.log(step), decay, reach)
    exact = [exact_trace(one.stays, one.track.time[-1:], x[None], y[None], tau, step)[0, 0] for tau in (200.0, 1.0)]
    np.testing.assert_allclose(ours[0], exact, atol=1e-3)
