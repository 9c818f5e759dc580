"""Long lists as JSON: one object, an item a line, whatever the items hold."""

from __future__ import annotations

import json

import pytest

from harness.cli.output import print_listing


@pytest.mark.parametrize(
    "items", [[], [{"a": 1}], [{"title": 'a "quote", a\nline end, <b> and ü', "none": None}, {"void": False}]]
)
def test_a_listing_is_one_json_object(capsys, items):
    print_listing({"schema": 1}, "runs", items)
    said = capsys.readouterr().out
    assert json.loads(said) == {"schema": 1, "runs": items}
    assert said.endswith("}\n")


def test_nan_is_a_defect_and_no_value(capsys):
    with pytest.raises(ValueError, match="JSON"):
        print_listing({}, "runs", [{"ber": float("nan")}])
    assert capsys.readouterr().out == ""
