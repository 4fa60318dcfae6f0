"""Every input's answer: what is wrong with it, and what the balance does then, after how long.

The loop, the node and the fault campaign all read this one table; ``docs/safety.md`` is printed from it. Times are s
of the condition lasting without a break (a few good samples in between are a break, one is not).
"""

from __future__ import annotations

import attrs

GO_ON, REFUSE, HOLD, COAST, STOP, TRIP = "go on", "refuse", "hold", "coast", "stop", "trip"
DEEDS: dict[str, str] = {
    GO_ON: "nothing is done about it beyond saying so",
    REFUSE: "what came is passed over with its reason in `/diagnostics`; what held before holds on",
    HOLD: "the last good value stands, or what is left of the input serves alone",
    COAST: "the loop goes on without it, on its model and on what its other senses tell",
    STOP: "controlled stop: plans are refused, arms and ball come to rest, it stays balanced, and lets go once held",
    TRIP: "torque off at once",
}
_ORDER = {deed: rank for rank, deed in enumerate(DEEDS)}

IMU, ORIENTATION, HEADING = "imu", "imu orientation", "imu heading"
DRIVE, ENCODER, ACTUATOR = "drive_states", "one encoder", "one actuator"
SENSES = "imu and drive_states"
ARMS, CLOCK, LEAN, SUPPLY = "joint_states", "clock", "lean and ball", "supply"
PLAN, LOAD, VELOCITY, GOAL = "lean_plan", "hand_load", "cmd_vel", "goal_pose"
ARM_PLAN, BALL_PLAN, WRENCH_PLAN, STATE, ODOM = "arm_plan", "ball_plan", "hand_wrench_plan", "balance_state", "odom"
ARM_STREAM = "arm_stream"
EMERGENCY, SUPPORT, PARAMETERS, COMMAND = "emergency_stop", "support", "parameters", "drive_command"


@attrs.frozen
class Step:
    """From ``after`` s of the condition on, this ``deed``."""

    after: float
    deed: str


@attrs.frozen
class Answer:
    """One row: an input, what is ``wrong`` with it, how that is ``known``, and the ``steps`` of the answer.

    ``by``: where it is seen to. ``falls``: whether torque going off is among what may come of it while nothing holds
    the robot.
    """

    input: str
    wrong: str
    known: str
    steps: tuple[Step, ...]
    by: str

    @property
    def falls(self) -> bool:
        """Whether the answer may end with the torque off."""
        return any(step.deed == TRIP for step in self.steps)

    def deed(self, lasting: float) -> str:
        """What is done once it has lasted so long, s."""
        found = GO_ON
        for step in self.steps:
            if lasting >= step.after - 1e-9:
                found = step.deed
        return found


def _steps(*pairs: tuple[float, str]) -> tuple[Step, ...]:
    return tuple(Step(after, deed) for after, deed in pairs)


_BLIND = _steps((0.0, COAST), (0.1, STOP))
_BALL_UNSEEN = _steps((0.0, COAST), (0.1, STOP), (2.0, TRIP))
_ARMS_UNSEEN = _steps((0.0, HOLD))
_ONE_LEFT_OUT = _steps((0.0, HOLD), (0.1, STOP))
_REFUSED = _steps((0.0, REFUSE))
_LOOP, _NODE, _PLANS, _ARMS_NODE = "BalanceLoop", "balance node", "check_plan", "arm_compensation"

_ROWS = (
    Answer(IMU, "silent", "no sample with a newer stamp", _BLIND, _LOOP),
    Answer(IMU, "late", "older than imu_timeout when it comes", _BLIND, _LOOP),
    Answer(IMU, "frozen", "six numbers the same to the bit as in the sample before", _BLIND, _LOOP),
    Answer(IMU, "not finite", "NaN or infinity in rate or acceleration", _BLIND, _LOOP),
    Answer(
        IMU, "saturated", "a rate or acceleration at the end of imu.rate_range or imu.acceleration_range", _BLIND, _LOOP
    ),
    Answer(
        IMU,
        "jump",
        "further than limits.rate_start from the last rate, or limits.rate_jump from that expected",
        _BLIND,
        _LOOP,
    ),
    Answer(
        IMU,
        "tilt",
        "lean and accelerometer differ by more than limits.tilt, pushes accounted for; latched until reset",
        _BLIND,
        _LOOP,
    ),
    Answer(IMU, "wrong frame", "frame_id is not imu.frame", _BLIND, _NODE),
    Answer(ORIENTATION, "missing", "marked as not reported (covariance -1)", _steps((0.0, HOLD), (1.0, STOP)), _LOOP),
    Answer(
        ORIENTATION,
        "not a unit quaternion",
        "norm off 1 by more than 0.0005, or not finite",
        _steps((0.0, HOLD), (1.0, STOP)),
        _LOOP,
    ),
    Answer(ORIENTATION, "jump", "turned by 0.02 rad more than the rates say", _steps((0.0, HOLD), (1.0, STOP)), _LOOP),
    Answer(
        HEADING,
        "turning",
        "gyro and drive differ by limits.turning while the floor holds the ball's spin: the drive's is used",
        _steps((0.0, HOLD), (1.0, STOP)),
        _LOOP,
    ),
    Answer(DRIVE, "silent", "no sample with a newer stamp", _BALL_UNSEEN, _LOOP),
    Answer(DRIVE, "late", "older than drive_timeout when it comes", _BALL_UNSEEN, _LOOP),
    Answer(DRIVE, "not finite", "NaN or infinity among the angles", _BALL_UNSEEN, _LOOP),
    Answer(DRIVE, "encoders absurd", "two encoders or more jump, stick or shake at once", _BALL_UNSEEN, _LOOP),
    Answer(DRIVE, "names", "an actuator missing, named twice, or not as many angles as names", _BALL_UNSEEN, _NODE),
    Answer(SENSES, "blind", "neither could be used", _steps((0.0, COAST), (0.1, STOP), (0.5, TRIP)), _LOOP),
    Answer(
        ENCODER, "jump", "further than limits.wheel_jump from what model and other senses expect", _ONE_LEFT_OUT, _LOOP
    ),
    Answer(
        ENCODER,
        "slip",
        "alone off by more than limits.wheel_slip from what model and gyro expect",
        _ONE_LEFT_OUT,
        _LOOP,
    ),
    Answer(
        ENCODER,
        "stuck",
        "stands still to the bit while the others and the model say that it turns",
        _ONE_LEFT_OUT,
        _LOOP,
    ),
    Answer(
        ACTUATOR,
        "dead, with a spare",
        "what it should give is missing in the robot's motion",
        _steps((0.0, HOLD)),
        _LOOP,
    ),
    Answer(
        ACTUATOR,
        "dead, without a spare",
        "what it should give is missing; the others keep roll and pitch, and the heading is given up",
        _steps((0.0, STOP)),
        _LOOP,
    ),
    Answer(
        SUPPLY,
        "sags",
        "reported to the loop: limits and capturable region are computed anew",
        _steps((0.0, HOLD)),
        _LOOP,
    ),
    Answer(SUPPLY, "too weak", "reported: less than half of the torque is left", _steps((0.0, STOP)), _LOOP),
    Answer(ARMS, "silent", "no newer sample; after arms_timeout new plans are refused", _ARMS_UNSEEN, _LOOP),
    Answer(ARMS, "late", "older than arms_timeout when it comes", _ARMS_UNSEEN, _LOOP),
    Answer(ARMS, "not finite", "NaN or infinity in a position", _ARMS_UNSEEN, _LOOP),
    Answer(
        ARMS,
        "jump",
        "a joint moved faster than 1.5 times its URDF velocity limit",
        _steps((0.0, HOLD), (0.2, STOP)),
        _LOOP,
    ),
    Answer(
        ARMS,
        "names",
        "a joint named twice, or not as many positions as names; unknown names are other machines'",
        _ARMS_UNSEEN,
        _NODE,
    ),
    Answer(CLOCK, "standing still", "the same stamp again: a duplicate", _REFUSED, _LOOP),
    Answer(CLOCK, "backwards", "an older stamp: reordered messages", _REFUSED, _LOOP),
    Answer(CLOCK, "ahead", "more than 0.1 s ahead, for one stamp or two", _REFUSED, _LOOP),
    Answer(CLOCK, "late tick", "up to 0.1 s since the tick before", _steps((0.0, COAST)), _LOOP),
    Answer(
        CLOCK,
        "overload",
        "by the wall clock ticks come more than 0.05 s late, second after second (not in lock-step)",
        _steps((0.0, GO_ON), (2.0, STOP)),
        _NODE,
    ),
    Answer(
        CLOCK,
        "jump",
        "three stamps in order from elsewhere: time goes on from there, plans are forgotten",
        _steps((0.0, STOP)),
        _LOOP,
    ),
    Answer(
        LEAN,
        "beyond capture",
        "further than torque, friction and speed can bring back, for 0.01 s",
        _steps((0.0, GO_ON), (0.01, TRIP)),
        _LOOP,
    ),
    Answer(LEAN, "beyond limits.trip_lean", "distance from the reference lean", _steps((0.0, TRIP)), _LOOP),
    Answer(
        LEAN, "ball too fast", "faster than limits.ball_speed of robot.yaml", _steps((0.0, GO_ON), (0.5, STOP)), _LOOP
    ),
    Answer(LEAN, "torque not a number", "what the loop worked out is not finite", _steps((0.0, TRIP)), _LOOP),
    Answer(PLAN, "malformed", "names, lengths, times, or numbers not finite", _REFUSED, _NODE),
    Answer(PLAN, "not balancing", "came in another state than engaging, balancing or stopping", _REFUSED, _PLANS),
    Answer(PLAN, "arms unknown", "joint states are older than arms_timeout", _REFUSED, _PLANS),
    Answer(PLAN, "too late", "its start is past", _REFUSED, _PLANS),
    Answer(
        PLAN,
        "beyond limits",
        "lean beyond limits.lean, torque beyond limits.torque, or ball beyond limits.ball_speed",
        _REFUSED,
        _PLANS,
    ),
    Answer(PLAN, "elsewhere", "begins further than limits.engage_lean from where the lean will be", _REFUSED, _PLANS),
    Answer(
        ARM_PLAN,
        "malformed",
        "an unknown joint, lengths or times that don't fit, numbers not finite, beyond a joint's limits",
        _REFUSED,
        _ARMS_NODE,
    ),
    Answer(ARM_PLAN, "not balancing", "came while the state is not engaging or balancing", _REFUSED, _ARMS_NODE),
    Answer(
        ARM_PLAN,
        "jump",
        "begins elsewhere than the arms will be, or leaves out a joint that moves",
        _REFUSED,
        _ARMS_NODE,
    ),
    Answer(
        ARM_PLAN,
        "beyond limits",
        "the lean or torque that it needs is beyond acceptance.* of compensation.yaml",
        _REFUSED,
        _ARMS_NODE,
    ),
    Answer(
        BALL_PLAN,
        "malformed",
        "found when the arm_plan comes that it goes with: both are refused",
        _REFUSED,
        _ARMS_NODE,
    ),
    Answer(
        WRENCH_PLAN, "malformed", "an unknown hand or part, times that don't increase, not finite", _REFUSED, _ARMS_NODE
    ),
    Answer(
        ARM_STREAM,
        "malformed",
        "an unknown joint, numbers not finite or beyond a joint's limits, a stamp far ahead: the sample is passed over",
        _REFUSED,
        _ARMS_NODE,
    ),
    Answer(
        ARM_STREAM,
        "jump",
        "begins elsewhere than the arms are, or goes on further than the joint could: the sample is passed over",
        _REFUSED,
        _ARMS_NODE,
    ),
    Answer(
        ARM_STREAM,
        "silent",
        "the arms come to rest within stream.stop, as the lean plan in force has it",
        _steps((0.0, HOLD)),
        _ARMS_NODE,
    ),
    Answer(
        STATE, "silent", "no acknowledgement of a plan within answer_timeout: the arms don't move", _REFUSED, _ARMS_NODE
    ),
    Answer(
        ODOM, "absurd", "not finite, or no unit quaternion: ball plans begin where it was last", _REFUSED, _ARMS_NODE
    ),
    Answer(
        "hand_load_estimate", "impossible", "unknown hand, impossible mass or inertia, not finite", _REFUSED, _ARMS_NODE
    ),
    Answer(LOAD, "unknown hand", "frame_id is no hand of robot.yaml", _REFUSED, _NODE),
    Answer(
        LOAD,
        "impossible",
        "mass negative or beyond hands.load_limit, inertia impossible, or not finite",
        _REFUSED,
        _NODE,
    ),
    Answer(
        VELOCITY, "stale", "0.5 s without another one: the ball comes to rest", _steps((0.0, GO_ON), (0.5, HOLD)), _NODE
    ),
    Answer(VELOCITY, "not balancing", "came in another state than balancing", _REFUSED, _NODE),
    Answer(VELOCITY, "absurd", "wrong frame, not finite, or beyond limits.ball_speed", _REFUSED, _NODE),
    Answer(GOAL, "not balancing", "came in another state than balancing", _REFUSED, _NODE),
    Answer(GOAL, "absurd", "wrong frame, not finite, or no unit quaternion", _REFUSED, _NODE),
    Answer(
        EMERGENCY, "true", "somebody wants it to stop; latched, false alone does not end it", _steps((0.0, STOP)), _NODE
    ),
    Answer(
        EMERGENCY,
        "true, arms moving",
        "arms come to rest by a plan within planner.stop_time, up to three times that where limits need it; where no "
        "such plan can be, the one in force ends as planned",
        _steps((0.0, STOP)),
        _ARMS_NODE,
    ),
    Answer(
        SUPPORT, "true while stopping", "a stand or gantry holds it: torque goes away", _steps((0.0, GO_ON)), "Guard"
    ),
    Answer(SUPPORT, "never true", "it stays balanced, and says so", _steps((0.0, GO_ON)), "Guard"),
    Answer(PARAMETERS, "refused", "a value out of range, or a loop without its margins", _REFUSED, _NODE),
    Answer(
        COMMAND,
        "silent",
        "no command reaches the drive: its own watchdog cuts the torque",
        _steps((0.0, HOLD), (0.1, TRIP)),
        "drive",
    ),
)
ANSWERS: dict[tuple[str, str], Answer] = {(row.input, row.wrong): row for row in _ROWS}


def harder(first: str, second: str) -> str:
    """The one of two deeds that goes further."""
    return first if _ORDER[first] >= _ORDER[second] else second
