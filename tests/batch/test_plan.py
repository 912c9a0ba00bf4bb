"""Plans: what they stand for, counted and made, and what wrong ones are told."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from tests.batch.conftest import PLAN, SPEC, write_plan
from tests.conftest import speech
from unmix.audio import write_audio
from unmix.batch.items import Items, count_items, plan_items
from unmix.batch.plan import Plan
from unmix.batch.run import forecast_batch, run_batch
from unmix.errors import FileError, InputError


def items_of(path: Path) -> Items:
    return plan_items(Plan.load(path), path)


def test_scenes_and_variants_of_a_plan(tmp_path: Path) -> None:
    path = write_plan(
        tmp_path,
        """
        variants = ["reference-mic"]
        [[render]]
        spec = "spec.toml"
        name = "table"
        seeds = 2
        snr_db = [10, 20]
        [[render.rooms]]
        name = "small"
        size_m = [3, 3, 2.5]
        t20_s = 0.2
        [[render.rooms]]
        name = "dry"
        size_m = [3, 3, 2.5]
        absorption = 0.9
        [[render.seats]]
        name = "apart"
        azimuth_deg = [0, 90]
        distance_m = [1.0, 1.0]
        [[vary]]
        base = "model"
        fields = { "model.order" = [1, 2], "solver.prior" = ["flat", "speech"] }
        [[vary]]
        base = "full"
        how = "paired"
        fields = { "room.post.leak" = [0.0, 0.1], "room.prediction.taps" = [4, 6] }
        """,
    )
    items = items_of(path)
    assert len(items) == count_items(Plan.load(path), tmp_path) == 8 * 7
    assert items.scenes[0].name == "table/small/apart/10 dB/seed 0"
    assert [v.name for v in items.variants] == [
        "reference-mic",
        "model:order=1,prior=flat",
        "model:order=1,prior=speech",
        "model:order=2,prior=flat",
        "model:order=2,prior=speech",
        "full:leak=0,taps=4",
        "full:leak=0.1,taps=6",
    ]
    assert items.variants[3].model.order == 2
    room = items.variants[6].room
    assert room is not None and room.post is not None and room.post.leak == 0.1
    spec = items.scenes[-1].spec
    assert spec is not None and spec.room is not None
    assert (spec.room.absorption, spec.room.t20_s, spec.seed, spec.noise.sensor_snr_db) == (0.9, None, 1, 20.0)
    assert [t.azimuth_deg for t in spec.talker] == [0, 90]
    assert len({items.key(i) for i in range(len(items))}) == len(items)


def test_random_seats_follow_from_the_seed(tmp_path: Path) -> None:
    scenes = items_of(write_plan(tmp_path)).scenes
    again = items_of(write_plan(tmp_path)).scenes
    seats = [[t.azimuth_deg or 0.0 for t in s.spec.talker] for s in scenes if s.spec]
    assert seats == [[t.azimuth_deg for t in s.spec.talker] for s in again if s.spec]
    assert seats[0] != seats[1]
    for first, second in seats:
        assert abs((first - second + 180) % 360 - 180) >= 40.0


def test_keys_follow_content_and_nothing_else(tmp_path: Path) -> None:
    before = items_of(write_plan(tmp_path / "a"))
    keys = [before.key(i) for i in range(len(before))]
    # Another folder, another title, names changed: the same keys.
    other = PLAN.replace("Small", "Large").replace('spec = "spec.toml"', 'spec = "spec.toml"\nname = "other"')
    moved = items_of(write_plan(tmp_path / "b", other))
    assert [moved.key(i) for i in range(len(moved))] == keys
    # A changed variant changes its own keys only.
    changed = PLAN.replace('"model"]', '"mine.toml"]')
    (tmp_path / "b" / "mine.toml").write_text('base = "model"\n[model]\norder = 3\n')
    mine = items_of(write_plan(tmp_path / "b", changed))
    same = [mine.key(i) == key for i, key in enumerate(keys)]
    assert same == [True, True, False] * 2
    # Another kind of reference changes all.
    against = items_of(write_plan(tmp_path / "c", 'against = "dry"\n' + PLAN))
    assert not {against.key(i) for i in range(len(against))} & set(keys)


SCENE = """
[recording]
file = "mix.wav"
[array]
positions_m = [[0, 0, 0], [0.04, 0, 0]]
[[talker]]
name = "mate"
azimuth_deg = 20.0
reference = "mate.wav"
"""


def test_scene_files_are_found_and_keyed_by_content(tmp_path: Path) -> None:
    for name in ("one", "two"):
        folder = tmp_path / "takes" / name
        folder.mkdir(parents=True)
        signal = speech("novel-reader", 1.0)[None]
        write_audio(folder / "mate.wav", signal, 16000)
        write_audio(folder / "mix.wav", np.repeat(signal, 2, axis=0), 16000)
        (folder / "scene.toml").write_text(SCENE)
    path = write_plan(tmp_path, 'scenes = ["takes/*/scene.toml"]\nvariants = ["model"]\n')
    items = items_of(path)
    assert [scene.name for scene in items.scenes] == ["takes/one", "takes/two"]
    assert items.scenes[0].digest == items.scenes[1].digest
    assert list(items.distinct()) == [0]  # the same scene twice is done once
    signal = 0.5 * speech("novel-reader", 1.0)[None]
    write_audio(tmp_path / "takes" / "two" / "mate.wav", signal, 16000, overwrite=True)
    assert list(items_of(path).distinct()) == [0, 1]


@pytest.mark.parametrize(
    ("plan", "message"),
    [
        ('variants = ["model"]', "names no scenes"),
        ('[[render]]\nspec = "spec.toml"', "names no variants"),
        (PLAN + '\nvariant = "x"', r"unknown key `variant`"),
        (PLAN.replace("variants =", "varients ="), r"unknown key `varients`.*did you mean `variants`"),
        (PLAN.replace("seeds = [3, 4]", "seed = 3"), r"unknown key `seed` in render.*did you mean `seeds`"),
        (PLAN.replace('"model"]', '"modell"]'), "no variant 'modell'; did you mean 'model'"),
        (PLAN.replace('"model"]', '"none/*.toml"]'), "no file fits 'none/"),
        (PLAN.replace('"model"]', '"model", "model"]'), "two variants are called 'model'"),
        (PLAN + '\n[[vary]]\nbase = "model"\nfields = { "model.odrer" = [1] }', "unknown key `odrer`.*`order`"),
        (PLAN + '\n[[vary]]\nbase = "model"\nfields = { "model.order" = [99] }', "key `model.order`.*<= 12"),
        (PLAN + '\n[[vary]]\nbase = "model"\nfields = { "room.judge" = [true] }', "'model' has no `room`"),
        (
            PLAN + '\n[[vary]]\nbase = "model"\nhow = "paired"\n'
            'fields = { "model.order" = [1], "solver.tail" = [0.1, 0.01] }',
            r"paired lists of different lengths \(model.order 1, solver.tail 2\)",
        ),
        (PLAN.replace('"stoi"]', '"stoj"]'), "no figure is called 'stoj'; did you mean 'stoi'"),
        (PLAN.replace("random_seats = {}", "random_seats = { least_apart_deg = 120 }") + "", None),
        (
            PLAN.replace("random_seats = {}", 'seats = [{ name = "a", azimuth_deg = [1] }]'),
            "has 1 values for 2 talkers",
        ),
        (PLAN.replace("[3, 4]", "[3, 3]"), "two scenes are called 'spec/seed 3'"),
        (PLAN + '\n[[metric]]\nname = "stoi"\nfile = "x.py"', "'stoi' is taken"),
    ],
)
def test_plans_that_are_wrong(tmp_path: Path, plan: str, message: str | None) -> None:
    path = write_plan(tmp_path, plan)
    if message is None:
        assert forecast_batch(path, None).items == 6
        return
    with pytest.raises(InputError, match=message) as caught:
        forecast_batch(path, None)
    assert "plan.toml" in str(caught.value) or "vary" in str(caught.value) or "variant" in str(caught.value)
    assert "\n" not in str(caught.value)


def test_missing_files_are_named(tmp_path: Path) -> None:
    with pytest.raises(FileError, match=r"plan\.toml: no such file"):
        forecast_batch(tmp_path / "plan.toml", None)
    path = write_plan(tmp_path)
    (tmp_path / "spec.toml").write_text(SPEC.replace("novel-reader", "nobody"))
    with pytest.raises(FileError, match=r"nobody\.flac: cannot be read"):
        forecast_batch(path, None)


def test_very_many_items_are_not_run_by_accident(tmp_path: Path) -> None:
    fields = ", ".join(f'"{name}" = {list(range(1, 11))}' for name in ("model.order", "solver.whitening_half_width"))
    path = write_plan(
        tmp_path, PLAN.replace("[3, 4]", "1000000") + f'\n[[vary]]\nbase = "model"\nfields = {{ {fields} }}'
    )
    with pytest.raises(InputError, match=r"stands for 103,000,000 items.*--yes"):
        run_batch(path, tmp_path / "out")
    assert not (tmp_path / "out").exists()


def test_a_forecast_counts_what_is_to_do(batch: tuple[Path, object], tmp_path: Path) -> None:
    plan, _ = batch
    fresh = forecast_batch(plan, None, workers=1)
    assert (fresh.scenes, fresh.variants, fresh.items, fresh.done, fresh.todo, fresh.to_render) == (2, 3, 6, 0, 6, 2)
    assert fresh.seconds > 0.0 and fresh.megabytes > 1.0 and fresh.measured == 0
    known = forecast_batch(plan, plan.parent / "out", workers=1)
    assert (known.done, known.todo, known.measured, known.seconds) == (6, 0, 6, 0.0)
