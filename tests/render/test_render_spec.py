from pathlib import Path

import numpy as np
import pytest

from unmix.errors import InputError
from unmix.explain import explain_fields
from unmix.render.demo import demo_spec_path
from unmix.render.spec import ArraySpec, RenderSpec, TalkerSpec


def written(folder: Path, text: str) -> Path:
    path = folder / "spec.toml"
    path.write_text(text)
    return path


@pytest.mark.parametrize(
    ("text", "message"),
    [
        (
            "[array]\n[[talker]]\nname = 'a'\nazimut_deg = 3",
            r"unknown key `azimut_deg` in talker\[0\]; did you mean `azimuth_deg`\?",
        ),
        (
            "[array]\n[[talker]]\nname = 'a'\nazimuth_deg = 700",
            r"key `talker\[0\]\.azimuth_deg`: expected a number <= 360",
        ),
        ("[array]\n[[talker]]\nname = ''", r"key `talker\[0\]\.name`"),
        ("talker = []\n[array]", "key `talker`"),
        ("[array]\n[[talker]]\nname = 'a'\n[room]\nsize_m = [5, 4]", r"key `room\.size_m`"),
        ("[array]\n[[talker]]\nname = 'a'\n[faults]\npolarity = [0]", r"key `faults\.polarity\[0\]`"),
    ],
)
def test_a_wrong_file_names_file_key_and_remedy(tmp_path: Path, text: str, message: str) -> None:
    with pytest.raises(InputError, match=rf"spec\.toml: .*{message}"):
        RenderSpec.load(written(tmp_path, text))


def test_numbers_of_numpy_are_taken_and_odd_ones_refused() -> None:
    talker = TalkerSpec(name="a", azimuth_deg=np.float64(3.0))
    spec = RenderSpec(array=ArraySpec(positions_m=np.zeros((1, 3))), talker=[talker]).checked()
    assert type(spec.talker[0].azimuth_deg) is float
    with pytest.raises(InputError, match=r"key `talker\[0\]\.start_s`: inf is not a finite number"):
        RenderSpec(array=ArraySpec(), talker=[TalkerSpec(name="a", start_s=float("inf"))]).checked()


def test_every_field_is_explained() -> None:
    rows = {row.key: row for row in explain_fields(RenderSpec)}
    assert not [row.key for row in rows.values() if not row.meaning or not row.type or not row.default]
    assert rows["room.t20_s"].unit == "s"
    assert rows["room.t20_s"].range == "0.05 to 5"
    assert rows["talker[].level_db"].default == "-26"
    assert rows["array.positions_m"].unit == "m"
    assert rows["room.size_m"].default == "required"


def test_the_demo_spec_is_there_and_fits() -> None:
    path = demo_spec_path()
    spec = RenderSpec.load(path)
    assert len(spec.talker) == 3
    assert spec.room is not None
    assert spec.room.t20_s == 0.3
    clips = [path.parent / str(talker.clip) for talker in spec.talker]
    assert sum(clip.stat().st_size for clip in clips) < 1.5e6
