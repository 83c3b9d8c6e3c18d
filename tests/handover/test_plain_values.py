"""Results as JSON values. Oracle: the json module with allow_nan=False, and what each type must become."""

import dataclasses
import json

import numpy as np
import pytest

from lagscape.case.parameters import Basis
from lagscape.handover.plain_values import plain, unit_suffix


@dataclasses.dataclass
class Result:
    values: np.ndarray
    basis: Basis
    nested: dict


def test_every_kind_of_value_becomes_what_json_knows():
    result = Result(np.array([1.0, np.nan]), Basis.MEASURED, {"pair": (1, None), "far": float("inf"), "one": np.float64(2.0), 3: True})
    expected = {"values": [1.0, None], "basis": "measured", "nested": {"pair": [1, None], "far": None, "one": 2.0, "3": True}}
    assert plain(result) == expected
    assert json.loads(json.dumps(plain(result), allow_nan=False)) == expected


@pytest.mark.parametrize(
    ("unit", "suffix"),
    [("L/min", "_l_min"), ("mmHg", "_mmhg"), ("N m", "_n_m"), ("", ""), ("%", "_percent"), ("L/min/mmHg", "_l_min_mmhg")],
)
def test_a_unit_ends_a_name(unit, suffix):
    assert unit_suffix(unit) == suffix
