"""What `--truth` says is taken, and what it can't mean is refused in one line."""

import numpy as np
import pytest

from ballbal_ros.errors import BallbalError
from ballbal_ros.robot.loads import Load
from ballbal_ros.simulation.truth import Truth, parse_truth
from helpers.robots import shelver
from helpers.simulated import simulation


def test_every_kind_of_key_is_taken() -> None:
    """Loads, masses, centres, the IMU's tilt and parameters of simulation.yaml each land where they belong."""
    truth = parse_truth(
        ["left_hand.load=2.2", "right_hand.load_factor=1.1", "base_link.center=0.002,0,-1e-3", "head.mass_factor=0.9",
         "imu.tilt=0.01,-0.02", "floor.friction=0.4", "drive.delay=0.004", "imu.attitude=ideal"],
        shelver(),
    )
    assert truth.load == {"left_hand": 2.2} and truth.load_factor == {"right_hand": 1.1}
    assert truth.center == {"base_link": (0.002, 0.0, -0.001)} and truth.mass_factor == {"head": 0.9}
    assert truth.imu_tilt == (0.01, -0.02)
    parameters = truth.of_parameters(simulation())
    assert (parameters.floor.friction, parameters.drive.delay, parameters.imu.attitude) == (0.4, 0.004, "ideal")
    assert parameters.floor.torsion == simulation().floor.torsion


def test_true_load_keeps_the_shape() -> None:
    """A hand's true mass replaces the said one, inertia scales along, centre stays; an empty hand stays empty."""
    truth = Truth(load={"left_hand": 3.0}, load_factor={"right_hand": 0.5})
    left = truth.of_load(Load("left_hand", 2.0, [0.0, 0.0, -0.05], np.diag([0.01, 0.02, 0.02])))
    assert left.mass == 3.0 and left.center.tolist() == [0.0, 0.0, -0.05]
    assert left.inertia == pytest.approx(np.diag([0.015, 0.03, 0.03]))
    assert truth.of_load(Load("right_hand", 2.0)).mass == 1.0
    assert truth.of_load(Load("left_hand", 0.0)).mass == 0.0


@pytest.mark.parametrize(
    ("item", "says"),
    [
        ("left_hand.lod=2", "did you mean left_hand.load?"),
        ("weather=bad", "it takes <hand>.load"),
        ("imu.tilt=0.1", "it takes 2 numbers"),
        ("floor.friction=slippery", "it takes a number"),
        ("floor.friction=nan", "it takes a number"),
        ("floor.friction", "write KEY=VALUE"),
        ("left_hand.load=-1", "it takes a positive number"),
    ],
)
def test_what_it_cannot_mean_is_one_line(item: str, says: str) -> None:
    """Unknown keys and values that don't fit are refused in one line that says what would do."""
    with pytest.raises(BallbalError) as caught:
        parse_truth([item], shelver())
    assert str(caught.value).startswith("--truth: ") and says in str(caught.value) and "\n" not in str(caught.value)


def test_parameter_out_of_range_is_refused() -> None:
    """A parameter's range holds here too."""
    truth = parse_truth(["floor.friction=100"], shelver())
    with pytest.raises(BallbalError, match=r"--truth: floor.friction is 100; its range is"):
        truth.of_parameters(simulation())


def test_a_drawn_truth_is_within_its_bounds_and_the_seeds_own() -> None:
    """Masses within 15 %, centres within 10 mm, tilt within 1°; the same seed draws the same; what is named wins."""
    truth = parse_truth(["drawn=3"], shelver())
    assert len(truth.mass_factor) > 15 and set(truth.mass_factor) == set(truth.center)
    assert all(0.85 <= factor <= 1.15 for factor in truth.mass_factor.values())
    assert all(abs(value) <= 0.01 for center in truth.center.values() for value in center)
    assert all(abs(value) <= 0.01746 for value in truth.imu_tilt)
    assert truth == parse_truth(["drawn=3"], shelver()) != parse_truth(["drawn=4"], shelver())
    named = parse_truth(["imu.tilt=0,0", "drawn=3", "battery.mass_factor=1.0"], shelver())
    assert named.imu_tilt == (0.0, 0.0) and named.mass_factor["battery"] == 1.0
    with pytest.raises(BallbalError, match=r"--truth: drawn is 1.5; it takes a seed"):
        parse_truth(["drawn=1.5"], shelver())
