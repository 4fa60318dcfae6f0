"""What weighing has found, as it stands in robot.yaml: laid over the URDF, or refused in one line."""

from __future__ import annotations

from pathlib import Path

import pytest

from ballbal_ros.commands.files import read_robot
from ballbal_ros.errors import BallbalError
from ballbal_ros.parameter_files import check_may_change, edits, read_values
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.robot.whole_body import WholeBody
from helpers.robots import CONFIG, shelver

HEAD = """
    mass_model:
      links: [{link}]
      {link}:
        mass: 12.0
        center: [0.0, 0.01, 0.3]
        inertia: {inertia}
"""
POSSIBLE = "[0.06, 0.0, 0.0, 0.05, 0.0, 0.08]"


def folder(tmp_path: Path, added: str) -> Path:
    """The demo robot's folder with something added to its robot.yaml."""
    for name in ("shelver.urdf", "balance.yaml", "compensation.yaml", "simulation.yaml"):
        (tmp_path / name).write_text((CONFIG / "shelver" / name).read_text())
    (tmp_path / "robot.yaml").write_text((CONFIG / "shelver" / "robot.yaml").read_text() + added)
    return tmp_path


def test_a_link_given_there_takes_the_place_of_the_urdfs(tmp_path: Path):
    """The battery gains 2 kg, and all that stands on the ball does."""
    description = RobotDescription.load(folder(tmp_path, HEAD.format(link="battery", inertia=POSSIBLE)))
    gained = WholeBody(description).mass - WholeBody(shelver()).mass
    assert gained == pytest.approx(2.0, abs=1e-9)
    assert WholeBody(description.as_drawn()).mass == pytest.approx(WholeBody(shelver()).mass, abs=1e-9)


@pytest.mark.parametrize(
    "added, says",
    [
        (HEAD.format(link="batery", inertia=POSSIBLE), ("batery", "battery")),
        (HEAD.format(link="battery", inertia="[0.06, 0.0, 0.0, 0.05, 0.0, 0.2]"), ("battery", "no possible body")),
        (HEAD.format(link="battery", inertia="[0.06, 0.0, 0.0, 0.05]"), ("battery", "6")),
        ("    mass_model:\n      links: [battery]\n", ("mass_model.battery.mass", "missing")),
        ("    mass_model:\n      imu_tilt: [0.1]\n", ("imu_tilt", "2")),
    ],
)
def test_what_no_robot_is_like_is_refused_in_one_line(tmp_path: Path, added: str, says: tuple[str, ...]):
    """Unknown links, impossible inertias, missing and ill-formed values name file and key."""
    with pytest.raises(BallbalError) as caught:
        read_robot(folder(tmp_path, added))
    line = str(caught.value)
    assert "robot.yaml" in line and "\n" not in line and all(word in line for word in says)


def test_servos_of_unknown_joints_are_refused(tmp_path: Path):
    """A bandwidth for a joint that is not there names the joint meant."""
    text = (CONFIG / "shelver" / "robot.yaml").read_text()
    own = "servo_bandwidth: 80.0\n      joints: [left_elbow]\n      left_elbow: {bandwidth: 20.0}"
    where = folder(tmp_path, "")
    (where / "robot.yaml").write_text(text.replace("servo_bandwidth: 80.0", own))
    with pytest.raises(BallbalError, match=r"arm.joints names left_elbow.*left_elbow_pitch"):
        RobotDescription.load(where)


def test_the_reader_of_config_watch_takes_it_whole(tmp_path: Path):
    """Read as config_watch reads it, every value of the mass model is there by its dotted name."""
    where = folder(tmp_path, HEAD.format(link="battery", inertia=POSSIBLE))
    values = read_values(where / "robot.yaml")
    assert values["mass_model.links"] == ["battery"] and values["mass_model.battery.mass"] == 12.0


def test_a_mass_model_does_not_change_under_a_standing_robot(tmp_path: Path):
    """While nodes run, config_watch refuses it in one line: it comes into force when they start."""
    where = folder(tmp_path, HEAD.format(link="battery", inertia=POSSIBLE)) / "robot.yaml"
    changes = edits(where, read_values(CONFIG / "shelver" / "robot.yaml"), read_values(where))
    with pytest.raises(BallbalError, match=r"mass_model.battery.mass .* can't change while the nodes run"):
        check_may_change(where, changes)
