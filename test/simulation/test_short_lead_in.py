"""With a short lead-in the simulated robot's ball stays near the least travel that any controller could reach."""

import pytest

from ballbal_ros.commands.rehearse import rehearse
from helpers.least_travel import least_travel
from helpers.robots import CONFIG, reach


@pytest.mark.parametrize("lead_in", [0.0, 0.2, 0.5])
def test_reach_travels_little_more_than_it_must(lead_in: float):
    """In contact physics, with noise, delay and friction, `reach` takes at most 1.5 times the least possible travel."""
    runs = rehearse(CONFIG / "plans" / "reach.yaml", CONFIG / "shelver", ("planned",), (0,), lead_in=lead_in).runs
    bound = least_travel(reach().body(), reach().path(), lead_in)
    assert not runs[0].fell
    assert runs[0].ball_travel_peak_mm < 1.5 * 1e3 * bound
