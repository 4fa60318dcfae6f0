"""The demo plans are ones that the demo robot can do: within its limits, and past itself."""

from dataclasses import dataclass
from itertools import groupby
from pathlib import Path
from typing import Any

import numpy as np
import pinocchio as pin
import pytest
import yaml

CONFIG = Path(__file__).parents[2] / "config"
URDF = CONFIG / "shelver" / "shelver.urdf"
PLANS = ("reach", "shelve", "still")
GRAVITY = 9.80665  # m/s^2
CLEARANCE = 0.03  # m, least gap that is left between parts that could meet
SAMPLE = 0.02  # s
HAND_LIMIT = 2.0  # kg, what a hand is built to carry


@dataclass(frozen=True)
class Move:
    """One rest-to-rest motion: joint positions (rad) at both ends, its duration (s), what the hands hold (kg)."""

    start: np.ndarray
    end: np.ndarray
    duration: float
    loads: dict[str, float]

    def samples(self) -> list[tuple[np.ndarray, np.ndarray, np.ndarray]]:
        """Position, velocity, acceleration of the quintic with no velocity and acceleration at its ends."""
        found = []
        for s in np.linspace(0.0, 1.0, int(np.ceil(self.duration / SAMPLE)) + 1):
            share = 10 * s**3 - 15 * s**4 + 6 * s**5
            rate = (30 * s**2 - 60 * s**3 + 30 * s**4) / self.duration
            change = (60 * s - 180 * s**2 + 120 * s**3) / self.duration**2
            way = self.end - self.start
            found.append((self.start + share * way, rate * way, change * way))
        return found


@dataclass(frozen=True)
class Story:
    """A plan read for these tests: moves, both ends (rad), what the hands hold in each span (kg), length (s)."""

    moves: list[Move]
    start: np.ndarray
    end: np.ndarray
    loads: list[dict[str, float]]
    duration: float


def model_of_arms() -> pin.Model:
    model = pin.buildModelFromUrdf(str(URDF))
    model.gravity.linear = np.array([0.0, 0.0, -GRAVITY])
    return model


def plan_file(name: str) -> dict[str, Any]:
    return yaml.safe_load((CONFIG / "plans" / f"{name}.yaml").read_text(encoding="utf-8"))


def story_of(name: str) -> Story:
    plan, model = plan_file(name), model_of_arms()

    def moved(position: np.ndarray, targets: dict[str, float]) -> np.ndarray:
        result = position.copy()
        for joint, value in targets.items():
            assert model.existJointName(joint), joint
            result[model.joints[model.getJointId(joint)].idx_q] = value
        return result

    start = moved(np.zeros(model.nq), plan["start"].get("posture", {}))
    loads = {load["hand"]: load["mass"] for load in plan["start"].get("loads", [])}
    position, duration = start, 0.0
    moves: list[Move] = []
    history: list[dict[str, float]] = []
    for step in plan["steps"]:
        if "move" in step:
            target = moved(position, step["move"])
            moves.append(Move(position, target, step["during"], loads))
            position = target
            duration += step["during"]
        elif "load" in step:
            loads = {**loads, step["load"]["hand"]: step["load"]["mass"]}
            continue  # takes no time: two hands may change in the same moment
        else:
            duration += step["wait"]
        history.append(loads)
    return Story(moves, start, position, history, duration)


def loaded_model(loads: dict[str, float]) -> pin.Model:
    """The arms with loads (kg) as points 0.05 m beyond the grip."""
    model = model_of_arms()
    for hand, mass in loads.items():
        frame = model.frames[model.getFrameId(hand)]
        load = pin.Inertia(mass, np.array([0.0, 0.0, -0.05]), np.zeros((3, 3)))
        last_joint = model.getJointId(hand.replace("_hand", "_wrist_pitch"))
        model.appendBodyToJoint(last_joint, load, frame.placement)
    return model


def pairs_that_could_meet(model: pin.Model, shapes: pin.GeometryModel) -> None:
    """Ask for all pairs of shapes but those on one rigid part and on neighbours, which touch at their joint."""
    joint_of = [shape.parentJoint for shape in shapes.geometryObjects]
    for first in range(len(joint_of)):
        for second in range(first + 1, len(joint_of)):
            a, b = joint_of[first], joint_of[second]
            if a != b and model.parents[a] != b and model.parents[b] != a:
                shapes.addCollisionPair(pin.CollisionPair(first, second))


def least_gap(positions: list[np.ndarray]) -> tuple[float, str]:
    """The least distance (m) between shapes that could meet over joint positions (rad), and which two they are."""
    model = model_of_arms()
    shapes = pin.buildGeomFromUrdf(model, str(URDF), pin.GeometryType.COLLISION)
    pairs_that_could_meet(model, shapes)
    data, shape_data = model.createData(), pin.GeometryData(shapes)
    least, who = np.inf, ""
    for position in positions:
        pin.computeDistances(model, data, shapes, shape_data, position)
        gaps = [result.min_distance for result in shape_data.distanceResults]
        if min(gaps) < least:
            least = min(gaps)
            pair = shapes.collisionPairs[int(np.argmin(gaps))]
            who = f"{shapes.geometryObjects[pair.first].name} and {shapes.geometryObjects[pair.second].name}"
    return least, who


@pytest.mark.parametrize("name", PLANS)
def test_file_has_the_plan_format(name: str) -> None:
    """Each plan is named as its file; each step is one verb with what belongs to it."""
    plan = plan_file(name)
    assert plan["name"] == name
    assert set(plan) == {"name", "start", "steps"}
    for step in plan["steps"]:
        verbs = set(step) - {"during"}
        assert len(verbs) == 1 and verbs <= {"wait", "move", "load"}
        assert ("during" in step) == ("move" in step)


@pytest.mark.parametrize("name", PLANS)
def test_moves_stay_within_joint_limits(name: str) -> None:
    """Ends lie within the position limits; the peak rate of a quintic, 15/8 distance over time, is allowed."""
    model, story = model_of_arms(), story_of(name)
    for position in [story.start] + [move.end for move in story.moves]:
        assert np.all(position >= model.lowerPositionLimit) and np.all(position <= model.upperPositionLimit)
    for move in story.moves:
        assert np.all(15 / 8 * np.abs(move.end - move.start) / move.duration <= model.velocityLimit)


@pytest.mark.parametrize("name", PLANS)
def test_joints_hold_two_kilograms(name: str) -> None:
    """At rest in any pose along the plans, with 2 kg in each hand, each joint holds with half its effort to spare."""
    story = story_of(name)
    model = loaded_model({"left_hand": HAND_LIMIT, "right_hand": HAND_LIMIT})
    data = model.createData()
    for position in [story.start] + [sample[0] for move in story.moves for sample in move.samples()]:
        assert np.all(np.abs(pin.computeGeneralizedGravity(model, data, position)) <= 0.5 * model.effortLimit)


@pytest.mark.parametrize("name", ["reach", "shelve"])
def test_joints_can_do_the_moves(name: str) -> None:
    """The torques of the moves themselves, with what the plan has the hands hold, stay within the effort limits."""
    for move in story_of(name).moves:
        model = loaded_model(move.loads)
        data = model.createData()
        for position, velocity, acceleration in move.samples():
            assert np.all(np.abs(pin.rnea(model, data, position, velocity, acceleration)) <= model.effortLimit)


@pytest.mark.parametrize("name", PLANS)
def test_arms_clear_the_body_and_each_other(name: str) -> None:
    """No part comes nearer than 3 cm to one that it could hit, at any moment of the plan."""
    story = story_of(name)
    gap, who = least_gap([story.start] + [sample[0] for move in story.moves for sample in move.samples()])
    assert gap >= CLEARANCE, who


def test_the_gap_sees_a_hand_in_the_body() -> None:
    """The check above can fail: a forearm turned inward across the body is found."""
    model = model_of_arms()
    position = np.zeros(model.nq)
    for joint, value in {"left_elbow_pitch": -1.6, "left_upper_arm_yaw": -1.9}.items():
        position[model.joints[model.getJointId(joint)].idx_q] = value
    gap, who = least_gap([position])
    assert gap <= 0.0
    assert "left" in who


@pytest.mark.parametrize("name", PLANS)
def test_loads_are_what_a_hand_can_carry(name: str) -> None:
    """No hand ever holds more than it is built for, and no load is negative."""
    for loads in story_of(name).loads:
        assert all(0.0 <= mass <= HAND_LIMIT for mass in loads.values())


def test_reach_is_the_motion_asked_for() -> None:
    """reach: 2 kg in each hand, one move, both shoulders forward by 1.4 rad in 0.8 s, books level to 0.2 rad."""
    story, model = story_of("reach"), model_of_arms()
    (move,) = story.moves
    assert move.duration == 0.8
    assert move.loads == {"left_hand": 2.0, "right_hand": 2.0}
    way = move.end - move.start
    for side in ("left", "right"):
        index = {
            joint: model.joints[model.getJointId(f"{side}_{joint}_pitch")].idx_q
            for joint in ("shoulder", "elbow", "wrist")
        }
        assert way[index["shoulder"]] == -1.4
        assert abs(sum(way[i] for i in index.values())) < 0.2


def test_shelve_ends_as_it_began() -> None:
    """shelve: 20 to 35 s, all loads announced and gone at the end, arms back where they were."""
    story = story_of("shelve")
    assert 20.0 <= story.duration <= 35.0
    np.testing.assert_array_equal(story.start, story.end)
    assert sum(story.loads[-1].values()) == 0.0
    assert all(step["load"]["announced"] is True for step in plan_file("shelve")["steps"] if "load" in step)


def test_books_are_neither_lost_nor_made() -> None:
    """shelve: both hands together hold the first book, both, the second, none; no weight comes or goes between."""
    totals = [round(sum(loads.values()), 9) for loads in story_of("shelve").loads]
    assert [total for total, _ in groupby(totals)] == [0.0, 1.2, 2.0, 0.8, 0.0]


def test_still_starts_as_reach() -> None:
    """The noise floor of reach is measured in its posture and with its loads."""
    assert plan_file("still")["start"] == plan_file("reach")["start"]
