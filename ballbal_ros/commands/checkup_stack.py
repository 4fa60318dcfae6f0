"""What ``ballbal checkup`` finds in a running stack, from what its nodes tell on ``/diagnostics``. Knows no ROS."""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Mapping, Sequence

import attrs

from ballbal_ros.balance.parameters import BalanceParameters
from ballbal_ros.findings import LOOK, OK, WRONG, Finding, graded

_NODES, _LOOP, _INPUT = "nodes", "loop", "input"
NEEDED = ("balance", "arm_compensation", "whole_body_kinematics")
_PURPOSE = {
    "balance": "nothing keeps the robot on its ball",
    "arm_compensation": "no arm motion is planned for",
    "whole_body_kinematics": "center_of_mass and body_inertia are missing; the loop does without",
}
_SENSORS = ("imu/data", "imu/data_raw", "drive_states", "joint_states")
_OF_BALANCE = ("odom", "balance_state")
_SLOW, _SLOW_IN_LOCK_STEP = 0.5, 5.0
_LATE_SHARE = (0.25, 0.75)
_TRIM_SHARE = (0.5, 0.9)
_TRIM_GROWS = 0.03
_RESERVE = (0.4, 0.15)
_LEVELS = (OK, LOOK, WRONG, WRONG)


@attrs.frozen
class Told:
    """What a node told once: when it came (s, wall), level (0 to 3), message (its state), values by name."""

    at: float
    level: int
    message: str
    values: Mapping[str, str]

    def number(self, name: str) -> float:
        """A value as a number; NaN where it is none or not there."""
        try:
            return float(self.values.get(name, "nan"))
        except ValueError:
            return math.nan


@attrs.frozen
class Heard:
    """What was heard of a stack: per node (its bare name) what it told, oldest first; node names as the graph has them;
    who publishes ``drive_command``; why a publisher of a topic is not heard by our nodes, by topic.
    """

    nodes: Mapping[str, Sequence[Told]]
    present: Sequence[str] = ()
    commanders: Sequence[str] = ()
    unheard: Mapping[str, str] = attrs.field(factory=dict)
    waited: float = 0.0

    @property
    def empty(self) -> bool:
        """Whether there is no stack at all."""
        return not self.nodes and not set(self.present) & set(NEEDED)


def check_stack(heard: Heard, balance: BalanceParameters | None = None) -> list[Finding]:
    """Judge what was heard; limits are those of the parameter files, as far as they could be read."""
    names = sorted(heard.nodes, key=lambda name: (NEEDED.index(name) if name in NEEDED else len(NEEDED), name))
    newest = {name: heard.nodes[name][-1] for name in names if heard.nodes[name]}
    found, loop = _presence(heard, newest), newest.get("balance")
    balances = loop is not None and loop.message != "inactive"
    waits = loop is not None and loop.values.get("clock") == "lock_step"
    for name, told in newest.items():
        topics = (*_SENSORS, *(_OF_BALANCE if balances else ()))
        found += _of_node(name, told, topics, _SLOW_IN_LOCK_STEP if waits else _SLOW)
    if loop is not None:
        found += _loop(loop, heard.nodes["balance"], balance, "simulated_robot" in newest)
    found += [
        Finding(_INPUT, topic, WRONG, why, "have it published with the quality of service that our nodes ask for")
        for topic, why in heard.unheard.items()
    ]
    return found


def _presence(heard: Heard, newest: Mapping[str, Told]) -> list[Finding]:
    found = []
    for name in NEEDED:
        if name not in newest:
            silent = name in heard.present
            what = f"is there, but told nothing within {heard.waited:.0f} s" if silent else "is not there"
            do = "it hangs: start it anew" if silent else "start it: ros2 launch ballbal_ros robot.launch.py"
            verdict = LOOK if name == "whole_body_kinematics" else WRONG
            found.append(Finding(_NODES, name, verdict, f"{what}: {_PURPOSE[name]}", do))
    twice = [name for name, count in Counter(heard.present).items() if count > 1]
    for name in twice:
        do = "end all but one: they would work against each other"
        found.append(Finding(_NODES, name, WRONG, "is there more than once in this domain and namespace", do))
    if len(heard.commanders) > 1:
        what = f"drive_command comes from {', '.join(sorted(heard.commanders))}"
        found.append(Finding(_NODES, "drive_command", WRONG, what, "only one may command the drive: end the others"))
    return found


def _of_node(name: str, told: Told, topics: Sequence[str], slow: float) -> list[Finding]:
    """What one node says of itself: its state, what it refuses, which of the ``topics`` it has not heard for ``slow``
    s.
    """
    verdict = _LEVELS[min(max(told.level, 0), 3)]
    reason = told.values.get("reason", "")
    state = f"{told.message}: {reason}" if reason else told.message or "says nothing of its state"
    found = [Finding(_NODES, name, verdict, state, _do_about(name, told))]
    for key, value in told.values.items():
        if key.startswith("refused "):
            what, _, do = value.partition("; ")
            found.append(Finding(_INPUT, f"{name}: {key[8:]}", LOOK, f"refused: {what}", do or "mend its sender"))
    running = name != "balance" or told.message != "inactive"
    for topic in topics:
        age = told.values.get(f"age {topic} s")
        if age is None:
            continue
        if age == "never":
            do = "is its publisher up, in this domain and namespace? ros2 topic info -v"
            found.append(Finding(_INPUT, f"{name}: {topic}", WRONG if running else LOOK, "never heard", do))
        elif not told.number(f"age {topic} s") < slow:
            what = f"silent for {told.number(f'age {topic} s'):.1f} s"
            found.append(Finding(_INPUT, f"{name}: {topic}", WRONG if running else LOOK, what, "see to its publisher"))
    return found


def _do_about(name: str, told: Told) -> str:
    """What would do about a node's state."""
    if told.message == "inactive" and name == "balance":
        return "once the robot is on its stand: ros2 lifecycle set /balance configure, then activate"
    if told.message in ("stopping", "released", "tripped"):
        return "see to its cause; then ros2 service call /balance/reset std_srvs/srv/Trigger"
    if told.message == "fell":
        return "start the simulated robot anew"
    return "" if told.level == 0 else "see the lines below"


def _loop(
    loop: Told,
    all_told: Sequence[Told],
    balance: BalanceParameters | None,
    simulated: bool,
) -> list[Finding]:
    found = []
    if loop.message != "inactive":
        if loop.values.get("clock") != "lock_step" and balance is not None:
            found += _pace(loop, balance)
        found += _margins_in_force(loop)
        if balance is not None:
            found.append(_trim(loop, all_told, balance.limits.trim_moment))
        found.append(_reserve(loop))
        found += _wrong_inputs(loop)
    scheduling = loop.values.get("scheduling", "")
    if not simulated and not (
        "SCHED_FIFO" in scheduling.split(",")[0].split(" ")[:1] and "memory locked" in scheduling
    ):
        do = "give balance realtime_priority (launch parameter), and see the lines on this machine"
        found.append(Finding(_LOOP, "scheduling", LOOK, scheduling or "not told", do))
    return found


def _pace(loop: Told, balance: BalanceParameters) -> list[Finding]:
    rate, worst, mean = (loop.number(key) for key in ("loop rate Hz", "late worst ms", "late mean ms"))
    share = rate / balance.loop.rate
    found = []
    if not 0.97 <= share <= 1.03:
        what = f"{rate:.0f} Hz, loop.rate is {balance.loop.rate:g} Hz"
        do = "give loop.rate what the IMU has, or find out where its messages are lost"
        found.append(Finding(_LOOP, "rate", WRONG if not 0.8 <= share <= 1.2 else LOOK, what, do))
    bears = 1e3 * balance.margins.delay
    verdict = graded(worst, _LATE_SHARE[0] * bears, _LATE_SHARE[1] * bears)
    what = f"{mean:.2f} ms late in the mean, {worst:.1f} ms at worst; margins.delay is {bears:g} ms"
    do = "" if verdict == OK else "stop what keeps the machine busy; SCHED_FIFO and a core of its own help most"
    return [*found, Finding(_LOOP, "lateness", verdict, what, do)]


def _margins_in_force(loop: Told) -> list[Finding]:
    phase, delay, disk = (loop.number(key) for key in ("phase margin deg", "delay margin ms", "disk margin"))
    if math.isnan(phase):
        return []
    what = f"phase {phase:.0f}°, delay {delay:.1f} ms, disk {disk:.2f}: checked when it was configured or tuned"
    return [Finding(_LOOP, "margins in force", OK, what)]


def _trim(loop: Told, all_told: Sequence[Told], limit: float) -> Finding:
    trim = loop.number("trim N m")
    running = [told for told in all_told if not math.isnan(told.number("trim N m"))]
    grows = 0.0
    if len(running) >= 2 and running[-1].at - running[0].at >= 1.0:
        grows = (trim - running[0].number("trim N m")) / (running[-1].at - running[0].at)
    verdict = graded(trim / limit, *_TRIM_SHARE)
    what = f"{trim:.1f} N m of {limit:g}"
    if grows > _TRIM_GROWS * limit:
        verdict, what = (LOOK if verdict == OK else verdict), f"{what}, and grows by {grows:.1f} N m/s"
    do = "" if verdict == OK else "does a cable pull, somebody lean on it, a hand hold what hand_load has not told?"
    return Finding(_LOOP, "trim", verdict, what, do)


def _reserve(loop: Told) -> Finding:
    reserve = loop.number("torque reserve")
    verdict = graded(reserve, *_RESERVE)
    do = "" if verdict == OK else "less to carry, gentler plans, or no push: little is left to catch it with"
    lost = loop.values.get("actuators lost", "")
    if lost:
        return Finding(_LOOP, "torque reserve", WRONG, f"goes on without {lost}", "stop it, and see to that actuator")
    return Finding(_LOOP, "torque reserve", verdict, f"{reserve:.0%} of the torque was left at the worst instant", do)


def _wrong_inputs(loop: Told) -> list[Finding]:
    found = [
        Finding(_INPUT, key[6:], WRONG, value, "docs/safety.md says what the loop does about it")
        for key, value in loop.values.items()
        if key.startswith("wrong ")
    ]
    seen = {key[5:]: value for key, value in loop.values.items() if key.startswith("seen ")}
    if seen and not found:
        what = ", ".join(f"{name} ({count} ticks)" for name, count in list(seen.items())[:4])
        found.append(
            Finding(_INPUT, "since it was configured", LOOK, f"has met {what}", "see to that sense or its cable")
        )
    return found
