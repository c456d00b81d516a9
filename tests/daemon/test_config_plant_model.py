"""The table [model] of a configuration: kept in its text, checked, handed to the law."""

import numpy as np
import pytest

from trialrunner.config import ConfigError, config_difference, load, load_text

TEXT = """\
[run]
name = "oven"
[link]
url = "zmq+tcp://127.0.0.1:7000"
[trial]
n_samples = 4
period_s = 0.5
[[inputs]]
name = "power"
unit = "%"
low = -20
high = 30
[[outputs]]
name = "temperature"
unit = "Cel"
low = 0
high = 150
[reference]
kind = "profile"
waypoints = [[20.0]]
velocity_limit_per_s = 1.0
[law]
kind = "norm_optimal"
step_weight = 0.1
[model]
kind = "transfer_function"
period_s = 0.5
numerator = [[[0.0, 0.5]]]
denominator = [[[1.0, -0.9]]]
"""


def test_the_model_lies_in_the_text_that_the_record_keeps():
    model = load_text(load_text(TEXT).text).run_settings().model
    response = model.build().impulse_response(4)[:, 0, 0]
    assert np.allclose(response, [0.0, 0.5, 0.45, 0.405])


def test_another_model_forbids_to_resume():
    assert config_difference(TEXT, TEXT) == []
    changed = config_difference(TEXT, TEXT.replace("-0.9", "-0.8"))
    assert len(changed) == 1
    assert changed[0].startswith("model.denominator")


@pytest.mark.parametrize(
    ("old", "new", "said"),
    [
        ("-0.9", "-1.1", "pole of magnitude 1.1"),
        ('[model]\nkind = "transfer_function"\nperiod_s = 0.5', None, "add a table"),
        ("0.5\nnumerator", "0.25\nnumerator", "0.25"),
    ],
)
def test_a_model_that_does_not_fit_is_refused_when_the_file_is_read(tmp_path, old, new, said):
    text = TEXT.replace(old, new) if new else TEXT[: TEXT.index("[model]")]
    path = tmp_path / "oven.toml"
    path.write_text(text)
    with pytest.raises(ConfigError, match=said):
        load(path)
