"""The ceiling figure answers how many members are needed."""

from __future__ import annotations

import base64
import re

from ceiling_cases import known_law_ensemble
from learnclosure.diagnosis.diagnose import diagnose
from learnclosure.report.ceiling_figure import ceiling_curves
from learnclosure.study import DiagnosisSettings


def test_the_caption_tells_the_members_for_a_reliability_of_nine_tenths():
    ensemble, ratios = known_law_ensemble(members=12, times=4, side=24)
    chosen = DiagnosisSettings(coarsen=1, floor_method="projection")
    picture = ceiling_curves("basin", diagnose(ensemble, chosen))
    assert base64.b64decode(picture.source.split(",")[1])[:4] == b"\x89PNG"
    found = re.search(r"eddy flux (\d+) ± (\d+)", picture.caption)
    # 1 + x .9/.1 members of the noise ratio x over four times.
    exact = 1 + 9 * ratios.mean() / 4
    assert abs(int(found[1]) - exact) < 0.25 * exact
    assert "members" in picture.text


def test_without_ceilings_there_is_no_figure():
    ensemble, _ = known_law_ensemble(members=4, times=1, side=8)
    chosen = DiagnosisSettings(coarsen=1, ceiling_draws=0)
    assert ceiling_curves("basin", diagnose(ensemble, chosen)) is None


def test_the_page_shows_the_curves(finished):
    page = (finished / "results" / "report.html").read_text(encoding="utf-8")
    assert "How many members?" in page
