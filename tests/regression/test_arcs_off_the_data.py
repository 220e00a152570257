"""A ridge whose brighter lobe was fitted where there is no data stopped its pair.

Glow towards dead rows rises up to their edge, so that the best lobe lies beyond
it; the line through it then has no good pixel, and asking how far it runs failed.
"""

from dataclasses import replace

import pytest

from latelight.arcs import find
from latelight.arcs.settings import ArcSettings

pytestmark = pytest.mark.regression


def test_a_line_without_data_runs_to_no_edge(
    rng, make_arc_difference, make_star_list, monkeypatch
):
    seen = []

    def keep(evidence):
        seen.append(evidence)
        return "arc", ""

    monkeypatch.setattr(find, "judge", keep)
    arc = {"x": 256.0, "y": 256.0, "angle": 0.3, "length": 120.0, "height": 10.0}
    find.find_arcs(
        make_arc_difference(rng, [arc]), stars=make_star_list(), settings=ArcSettings()
    )
    evidence = seen[0]
    outside = replace(evidence.fit, circle=evidence.fit.circle.moved(0.0, 2000.0))

    assert not replace(evidence, fit=outside).line().to_edges
