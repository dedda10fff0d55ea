"""The corpus: nothing on both sides of a split, the ratio it claims, the truth of its faults."""

from __future__ import annotations

import numpy as np
import pytest

from sigguard.errors import UsageError
from sigguard.reliability import HARM_FAULTS, LEARNED_FAULTS
from sigguard.simulate.recipes import training_recipe
from sigguard.simulate.recorded import PARTS, noise_power_mv2
from sigguard.training.carriers import real_subjects, simulated_carrier
from sigguard.training.corpus import SIZES, Shape, Size, build_corpus, plan_chunks
from sigguard.training.spoil import (
    FAULT_OF,
    NoiseSource,
    draw_kinds,
    fault_truth,
    harm_truth,
    spoil_row,
    spoil_strip,
)
from sigguard.training.table import GROUPS
from training.fake import FAKE

RECIPE = training_recipe()
TINY = Size(rows=(2, 1, 1), strips=(1, 1, 1), cells=1, shapes=3 * (Shape(2, 2, 4),))
SOURCE = NoiseSource(recipe=RECIPE, folder=None, part="train")


@pytest.fixture(scope="module")
def corpus():
    return build_corpus(RECIPE, FAKE, plan_chunks(RECIPE, TINY, seed=5))


def test_a_carrier_belongs_to_one_part(corpus) -> None:
    for table in (corpus.rows, corpus.strips):
        for who in np.unique(table.carrier):
            assert len(np.unique(table.part[table.carrier == who])) == 1
        assert set(np.unique(table.part)) == {0, 1, 2}
    assert not set(corpus.rows.carrier) & set(corpus.strips.carrier)


def test_every_chunk_has_a_seed_of_its_own() -> None:
    chunks = plan_chunks(RECIPE, SIZES["full"], seed=5)
    drawn = [np.random.default_rng(c.seed).integers(0, 2**62) for c in chunks]
    assert len(set(drawn)) == len(chunks)
    assert {c.fs_hz for c in chunks} == {rate for rate, _ in RECIPE.fs_hz}
    assert all(5 <= c.duration_s <= 30 for c in chunks)
    analysed = sum(c.n_carriers * c.n_leads * c.n_draws for c in chunks if c.kind != "strips")
    assert 60_000 <= analysed <= 100_000


def test_same_seed_same_corpus_and_another_seed_another(corpus) -> None:
    again = build_corpus(RECIPE, FAKE, plan_chunks(RECIPE, TINY, seed=5))
    other = build_corpus(RECIPE, FAKE, plan_chunks(RECIPE, TINY, seed=6))
    np.testing.assert_array_equal(again.rows.features, corpus.rows.features)
    np.testing.assert_array_equal(again.rows.error, corpus.rows.error)
    np.testing.assert_array_equal(again.strips.features, corpus.strips.features)
    assert other.rows.features.shape != corpus.rows.features.shape or not np.array_equal(
        other.rows.features, corpus.rows.features, equal_nan=True
    )


def test_cells_are_ten_draws_of_one_noise_at_one_ratio(corpus) -> None:
    rows = corpus.rows.pick(corpus.rows.cell >= 0)
    assert len(rows)
    for cell in np.unique(rows.cell):
        one = rows.pick(rows.cell == cell)
        assert len(one) == 10 and len(np.unique(one.snr_db)) == 1 and len(np.unique(one.carrier)) == 1
        assert len(np.unique(one.features[:, 1])) == 10  # the cut differs


def test_progress_counts_every_chunk() -> None:
    seen = []
    chunks = plan_chunks(
        RECIPE, Size(rows=(1, 1, 1), strips=(0, 0, 0), cells=0, shapes=3 * (Shape(1, 1, 2),)), seed=1
    )
    build_corpus(RECIPE, FAKE, chunks, progress=lambda *step: seen.append(step))
    assert seen == [("corpus", 1, 3), ("corpus", 2, 3), ("corpus", 3, 3)]


@pytest.mark.parametrize("snr_db", [-6.0, 6.0, 24.0])
@pytest.mark.parametrize("kinds", [("muscle",), ("wander", "mains", "motion")])
def test_the_ratio_is_that_of_the_noise_stress_definition(kinds, snr_db: float) -> None:
    rng = np.random.default_rng(3)
    clean, n = np.zeros(5000), 60
    ratios = []
    for _ in range(n):
        row = spoil_row(
            rng, clean, kinds=kinds, snr_db=snr_db, qrs_mv=1.2, step_mv=1e-6, fs_hz=500.0, source=SOURCE
        )
        ratios.append(10 * np.log10(1.2**2 / 8 / noise_power_mv2(row.x_mv, 500.0)))
    # Single noise is exact; in a mixture the powers add on average, and wander and motion vary with the trims.
    np.testing.assert_allclose(np.median(ratios), snr_db, atol=1e-3 if len(kinds) == 1 else 1.0)


def test_alone_is_the_clean_row_with_one_kind_and_they_add_up() -> None:
    rng = np.random.default_rng(4)
    clean = simulated_carrier(rng, RECIPE, fs_hz=250.0, duration_s=5.0).signal_mv[1]
    row = spoil_row(
        rng,
        clean,
        kinds=("muscle", "wander"),
        snr_db=3.0,
        qrs_mv=1.0,
        step_mv=1e-6,
        fs_hz=250.0,
        source=SOURCE,
    )
    assert [kind for kind, _ in row.alone] == ["muscle", "wander"]
    np.testing.assert_allclose(sum(x - clean for _, x in row.alone), row.x_mv - clean, atol=4e-6)
    single = spoil_row(
        rng, clean, kinds=("muscle",), snr_db=3.0, qrs_mv=1.0, step_mv=1e-6, fs_hz=250.0, source=SOURCE
    )
    assert single.alone == ()


def test_every_kind_of_the_recipe_can_be_laid_on_a_row_and_a_strip() -> None:
    rng = np.random.default_rng(5)
    carrier = simulated_carrier(rng, RECIPE, fs_hz=250.0, duration_s=5.0)
    for kind in SOURCE.kinds()[0]:
        row = spoil_row(
            rng,
            carrier.signal_mv[1],
            kinds=(kind,),
            snr_db=6.0,
            qrs_mv=1.0,
            step_mv=0.005,
            fs_hz=250.0,
            source=SOURCE,
        )
        assert np.isfinite(row.x_mv).any() and not np.array_equal(row.x_mv, carrier.signal_mv[1])
        strip = spoil_strip(
            rng, carrier.signal_mv, kinds=(kind,), snr_db=6.0, qrs_mv=1.0, fs_hz=250.0, source=SOURCE
        )
        assert strip.shape == carrier.signal_mv.shape and not np.array_equal(strip, carrier.signal_mv)


def test_recorded_kinds_need_a_folder() -> None:
    rng = np.random.default_rng(6)
    drawn = {kind for _ in range(300) for kind in draw_kinds(rng, SOURCE)}
    assert drawn and not any(kind.startswith("recorded") for kind in drawn)
    with pytest.raises(UsageError, match="folder"):
        SOURCE.noise(rng, "recorded-em", n_samples=100, fs_hz=250.0)


def test_fault_truth_is_what_was_laid_on_and_felt() -> None:
    kinds = [("muscle",), ("muscle",), ("recorded-em", "mains"), (), ("lead-off",)]
    harmed = [{"muscle": True}, {"muscle": False}, {"recorded-em": True, "mains": False}, {}, {}]
    truth, asked = fault_truth(kinds, harmed)
    at = {name: k for k, name in enumerate(LEARNED_FAULTS)}
    assert truth[0].tolist() == [name == "muscle" for name in LEARNED_FAULTS]
    assert not truth[1].any() and asked[[0, 1, 3]].all()
    assert truth[2, at["motion"]] and not truth[2, at["mains"]]
    # What recorded movement holds beside itself is not to be named for it.
    assert asked[2].all() and truth[2].sum() == 1
    assert not asked[4].any()
    assert set(FAULT_OF.values()) == set(LEARNED_FAULTS)


def test_harm_truth_speaks_only_of_what_lies_there() -> None:
    some, none = np.array([1, 0, 0, -1, 1], np.int8), np.array([0, 0, 1, -1, 0], np.int8)
    out = harm_truth([{"muscle": some}, {"muscle": none, "flat": some}, {}])
    assert out.shape == (3, len(HARM_FAULTS), 5)
    np.testing.assert_array_equal(out[0, HARM_FAULTS.index("muscle")], some)
    np.testing.assert_array_equal(out[1, HARM_FAULTS.index("flat")], some)
    assert (out[2] == -1).all() and (out[0] >= 0).sum() == 4


def test_the_truth_of_harm_agrees_with_the_truth_of_faults(corpus) -> None:
    rows = corpus.rows
    taken = (rows.harm[:, : len(LEARNED_FAULTS)] == 1).any(axis=2)
    assert taken.any() and not (taken & ~rows.fault).any()  # what takes a measurement was felt
    assert (rows.harm[rows.group == GROUPS.index("none")] == -1).all()


def test_real_subjects_are_split_once(tmp_path) -> None:
    for k in range(20):
        (tmp_path / f"r{k}.hea").touch()
    split = real_subjects(tmp_path, seed=1)
    names = [name for part in PARTS for name in split[part]]
    assert sorted(names) == sorted(f"r{k}" for k in range(20)) and all(split[part] for part in PARTS)
    assert split == real_subjects(tmp_path, seed=1)
    with pytest.raises(UsageError, match="records"):
        real_subjects(tmp_path / "nowhere", seed=1)


@pytest.mark.filterwarnings("ignore")  # wfdb's own use of pandas
def test_recorded_noise_and_real_carriers_fill_their_groups(open_data) -> None:
    noise, real_dir = str(open_data / "nstdb"), str(open_data / "ludb")
    size = Size(rows=(1, 1, 1), strips=(0, 0, 0), cells=1, shapes=3 * (Shape(3, 2, 8),), real_every=1)
    chunks = plan_chunks(RECIPE, size, seed=2, real=real_subjects(real_dir, seed=2))
    rows = build_corpus(RECIPE, FAKE, chunks, noise_dir=noise, carriers_dir=real_dir).rows
    assert rows.real.all() and set(rows.fs_hz) == {500.0}
    assert {GROUPS[g] for g in np.unique(rows.group)} >= {"bw", "ma", "em", "simulated"}
