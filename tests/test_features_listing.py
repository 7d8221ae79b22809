"""The table of features a user is shown."""

from __future__ import annotations

from io import StringIO

from rich.console import Console

from learnclosure.listing import feature_listing
from learnclosure.quantities import FEATURES, INPUTS


def test_every_input_and_feature_is_listed_with_group_units_and_meaning():
    console = Console(width=200, record=True, file=StringIO())
    console.print(feature_listing())
    text = console.export_text()
    for row in (*INPUTS.values(), *FEATURES.values()):
        assert f" {row.name} " in text
    assert f"{len(FEATURES)} features" in text
    line = next(line for line in text.splitlines() if " jet_zone " in line)
    assert "jet" in line
    assert "1, scalar, along-jet" in line
    assert "2 in the core of a jet" in line
