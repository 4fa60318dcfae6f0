"""What the table of answers is written in: the deeds, the inputs' names, and what one row says.

The whole table is :data:`ballbal_ros.balance.answer_table.ANSWERS`.
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

IN_LOOP, IN_NODE, IN_PLAN_CHECK, IN_ARMS_NODE = "BalanceLoop", "balance node", "check_plan", "arm_compensation"


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


def steps(*pairs: tuple[float, str]) -> tuple[Step, ...]:
    """Steps from (after, deed)."""
    return tuple(Step(after, deed) for after, deed in pairs)


REFUSED = steps((0.0, REFUSE))


def harder(first: str, second: str) -> str:
    """The one of two deeds that goes further."""
    return first if _ORDER[first] >= _ORDER[second] else second
