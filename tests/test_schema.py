"""The result document is what docs/result.schema.json says, and the schema lets nothing else through."""

from __future__ import annotations

import copy
import json
import math
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from jsonschema import Draft202012Validator

from qmeter.estimate.modes import Measurement
from qmeter.show import document
from qmeter.show.document import Failure, Pooled
from tests import fakes

SCHEMA = json.loads((Path(__file__).resolve().parent.parent / "docs" / "result.schema.json").read_text(encoding="utf-8"))
VALIDATOR = Draft202012Validator(SCHEMA)


def whole() -> dict[str, Any]:
    """A document with everything in it, through JSON and back."""
    plate, bar = fakes.plate(), fakes.bar()
    pooled = Pooled(("spruce-plate.wav", "bar.wav"), ("hung", None), plate.modes, plate.doubts)
    failures = [Failure("lost.wav", "missing", "There is no file lost.wav.")]
    result = document.document("0.1.0", [plate, bar, fakes.silence()], failures, pooled)
    parsed: dict[str, Any] = json.loads(document.as_json(result))
    return parsed


def test_the_schema_is_a_schema() -> None:
    """It keeps to draft 2020-12 itself."""
    Draft202012Validator.check_schema(SCHEMA)


def test_every_object_in_the_schema_is_closed() -> None:
    """No object of the document may carry a name that the schema does not know."""

    def walk(node: object) -> None:
        if isinstance(node, dict):
            if node.get("type") == "object":
                assert node["additionalProperties"] is False, node
                assert set(node["required"]) <= set(node["properties"]), node
            for value in node.values():
                walk(value)
        elif isinstance(node, list):
            for value in node:
                walk(value)

    walk(SCHEMA)


def test_documents_hold() -> None:
    """With everything in it, and with nothing in it."""
    VALIDATOR.validate(whole())
    VALIDATOR.validate(json.loads(document.as_json(document.document("0.1.0", []))))


def test_pooled_is_there_only_when_asked_for() -> None:
    """A plain run has the four keys of the contract."""
    assert list(document.document("0.1.0", [fakes.bar()])) == ["schema", "qmeter_version", "recordings", "failures"]
    assert list(whole()) == ["schema", "qmeter_version", "recordings", "failures", "pooled"]


def test_figures_of_a_strike_carry_value_and_u95_only() -> None:
    """Pooled figures carry the budget besides."""
    recording = whole()["recordings"][0]
    assert set(recording["strikes"][0]["modes"][0]["q"]) == {"value", "u95"}
    assert set(recording["modes"][0]["q"]) == {"value", "u95", "k", "nu", "parts"}
    assert set(recording["modes"][0]["q"]["parts"]) == {"fit", "model", "scatter", "mounting", "clock"}
    assert set(recording["modes"][0]["half_power"]["q"]) == {"value", "u95"}


def test_values_are_the_modes_own() -> None:
    """Nothing is mixed up on the way: checked against the closed forms for Q 61.2 at 184.12 Hz."""
    mode = whole()["recordings"][0]["modes"][0]
    decay = math.pi * 184.12 / math.sqrt(61.2**2 - 0.25)
    expected = {
        "frequency_hz": 184.12,
        "q": 61.2,
        "t60_s": 3.0 * math.log(10.0) / decay,
        "decay_rate_per_s": decay,
        "time_constant_s": 1.0 / decay,
        "half_power_width_hz": decay / math.pi,
        "loss_factor": 1.0 / 61.2,
        "damping_ratio": 0.5 / 61.2,
        "log_decrement": decay / 184.12,
        "cycles_to_e_minus_pi": math.sqrt(61.2**2 - 0.25),
    }
    assert {name: mode[name]["value"] for name in expected} == pytest.approx(expected, rel=1e-9, abs=0)


def test_infinite_degrees_of_freedom_are_null() -> None:
    """JSON knows no infinity; nothing but `nu` becomes null by it."""
    q = whole()["recordings"][1]["modes"][0]["q"]
    assert q["nu"] is None
    assert q["u95"] > 0
    assert q["k"] == pytest.approx(1.96, rel=1e-3, abs=0)


def test_without_uncertainty_u95_is_null_and_a_doubt_is_there() -> None:
    """A figure without an uncertainty never goes unexplained."""
    mode = whole()["recordings"][1]["modes"][2]
    assert mode["q"] == {"value": pytest.approx(611.0, rel=1e-9), "u95": None, "k": None, "nu": None, "parts": None}
    assert mode["doubts"]


def test_digital_silence_is_null() -> None:
    """Minus infinity dBFS before a strike is no number in JSON."""
    bar = fakes.bar()
    quiet = replace(bar.strikes[0], noise_dbfs=-math.inf)
    result = document.document("0.1.0", [replace(bar, strikes=(quiet,))])
    VALIDATOR.validate(result)
    assert result["recordings"][0]["strikes"][0]["noise_dbfs"] is None


def test_scalars_of_numpy_are_numbers() -> None:
    """What an estimator leaves as np.float32, np.int64 or np.bool_ is written as the number that it is."""
    of_a_strike: dict[str, Any] = {"onset_s": np.float32(0.25), "accepted": np.bool_(True)}
    of_the_whole: dict[str, Any] = {"channels": np.int64(2), "sample_rate_hz": np.float32(44100)}
    bar = replace(fakes.bar(), strikes=(replace(fakes.bar().strikes[0], **of_a_strike),), **of_the_whole)
    result = json.loads(document.as_json(document.document("0.1.0", [bar])))
    VALIDATOR.validate(result)
    assert result["recordings"][0]["channels"] == 2
    assert result["recordings"][0]["strikes"][0]["onset_s"] == 0.25


def test_nan_is_refused_rather_than_printed() -> None:
    """A NaN that slipped in is an error, not a document that strict parsers refuse."""
    broken: Measurement = replace(fakes.bar(), duration_s=math.nan)
    with pytest.raises(ValueError, match="not JSON compliant"):
        document.as_json(document.document("0.1.0", [broken]))


def drop_doubts(result: dict[str, Any]) -> None:
    result["recordings"][1]["modes"][2]["doubts"] = []


def add_a_name(result: dict[str, Any]) -> None:
    result["recordings"][0]["modes"][0]["tau"] = {"value": 1.0, "u95": 0.1}


def drop_u95(result: dict[str, Any]) -> None:
    del result["recordings"][0]["modes"][0]["q"]["u95"]


def budget_in_a_strike(result: dict[str, Any]) -> None:
    result["recordings"][0]["strikes"][0]["modes"][0]["q"]["k"] = 2.0


def negative_u95(result: dict[str, Any]) -> None:
    result["recordings"][0]["modes"][0]["q"]["u95"] = -1.0


def another_version(result: dict[str, Any]) -> None:
    result["schema"] = "qmeter.result/2"


def word_with_blanks(result: dict[str, Any]) -> None:
    result["recordings"][2]["doubts"][0]["code"] = "No ring"


@pytest.mark.parametrize(
    "spoil",
    [drop_doubts, add_a_name, drop_u95, budget_in_a_strike, negative_u95, another_version, word_with_blanks],
    ids=lambda f: str(f.__name__),
)
def test_spoiled_documents_are_refused(spoil: Callable[[dict[str, Any]], None]) -> None:
    """The schema is strict: each of these is refused, and the same document unspoiled is not."""
    result = whole()
    assert VALIDATOR.is_valid(result)
    spoiled = copy.deepcopy(result)
    spoil(spoiled)
    assert not VALIDATOR.is_valid(spoiled)
