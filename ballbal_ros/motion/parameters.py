"""The parameters of compensation.yaml: the planner's grid, the lead-in, what a plan may ask for."""

from __future__ import annotations

import attrs

from ballbal_ros.declaration import parameter, section


@attrs.frozen(kw_only=True)
class PlannerParameters:
    """How the lean planner works."""

    step: float = parameter(
        "double", 0.01, unit="s", low=0.001, high=0.05, meaning="step of the planner's grid", runtime=True
    )
    lead_in: float = parameter(
        "double",
        1.6,
        unit="s",
        low=0.0,
        high=5.0,
        meaning="time between the start of the lean and the start of the arms",
        runtime=True,
    )
    tail: float = parameter(
        "double",
        1.6,
        unit="s",
        low=0.5,
        high=5.0,
        meaning="time that the plan goes on after the arms have come to rest",
        runtime=True,
    )
    allowance: float = parameter(
        "double",
        0.3,
        unit="s",
        low=0.0,
        high=5.0,
        meaning="time from a request to the start of its lean, for planning and for the bus",
        runtime=True,
    )
    stop_time: float = parameter(
        "double",
        0.8,
        unit="s",
        low=0.1,
        high=5.0,
        meaning="time in which a cancelled or stopped arm motion comes to rest",
        runtime=True,
    )


@attrs.frozen(kw_only=True)
class StreamParameters:
    """How arms are compensated that are streamed or moved by hand."""

    delay: float = parameter(
        "double",
        0.2,
        unit="s",
        low=0.0,
        high=2.0,
        meaning="time by which the arms follow arm_stream later: the planner's preview",
        runtime=True,
    )
    measured: bool = parameter(
        "bool",
        False,
        unit="-",
        meaning="while nothing is planned or streamed, plan the lean from joint_states: arms that are moved by hand",
        runtime=True,
    )
    interval: float = parameter(
        "double", 0.04, unit="s", low=0.01, high=0.2, meaning="time from one lean plan to the next", runtime=True
    )
    latency: float = parameter(
        "double",
        0.04,
        unit="s",
        low=0.0,
        high=0.5,
        meaning="time from what a lean plan knows to its start, for planning and for the bus",
        runtime=True,
    )
    stop: float = parameter(
        "double",
        0.2,
        unit="s",
        low=0.02,
        high=2.0,
        meaning="time in which the arms come to rest beyond what is known of them",
        runtime=True,
    )


@attrs.frozen(kw_only=True)
class AcceptanceParameters:
    """What a plan may use of what there is; beyond it the plan is refused."""

    torque_use: float = parameter(
        "double",
        0.8,
        unit="-",
        low=0.05,
        high=1.0,
        meaning="greatest share of limits.drive_torque and of every actuator's effort_limit",
        runtime=True,
    )
    friction_use: float = parameter(
        "double", 0.75, unit="-", low=0.05, high=1.0, meaning="greatest share of the floor's friction", runtime=True
    )
    torsion_use: float = parameter(
        "double", 0.9, unit="-", low=0.05, high=1.0, meaning="greatest share of the floor's spin moment", runtime=True
    )
    ball_travel: float = parameter(
        "double",
        0.3,
        unit="m",
        low=0.0,
        high=10.0,
        meaning="greatest planned travel of the ball besides its own plan",
        runtime=True,
    )


@attrs.frozen(kw_only=True)
class RepetitionParameters:
    """What a motion that is done again may learn from the runs before."""

    moment: float = parameter(
        "double",
        8.0,
        unit="N m",
        low=0.0,
        high=1e3,
        meaning="greatest moment about the contact that is learnt, each axis",
        runtime=True,
    )
    newest: float = parameter(
        "double",
        0.3,
        unit="-",
        low=0.0,
        high=1.0,
        meaning="how much the newest run counts at least; otherwise all runs count the same",
        runtime=True,
    )


@attrs.frozen(kw_only=True)
class CompensationParameters:
    """compensation.yaml as a whole."""

    compensation: str = parameter(
        "string",
        "planned",
        unit="-",
        choices=("planned", "quasi_static", "none"),
        meaning="lean ahead of the arms by plan; lean that balances the measured arm pose; take no notice of the arms",
        runtime=True,
    )
    answer_timeout: float = parameter(
        "double",
        2.0,
        unit="s",
        low=0.1,
        high=60.0,
        meaning="wall time to wait for the balance node's acknowledgement",
        runtime=True,
    )
    planner: PlannerParameters = section(PlannerParameters)
    stream: StreamParameters = section(StreamParameters)
    acceptance: AcceptanceParameters = section(AcceptanceParameters)
    repetition: RepetitionParameters = section(RepetitionParameters)
