"""``docs/safety.md``, written from the loop's own tables: ``python -m ballbal_ros.report.safety_page``."""

from __future__ import annotations

import re
from pathlib import Path

from ballbal_ros.balance.answer_table import ANSWERS
from ballbal_ros.balance.answers import DEEDS, Answer
from ballbal_ros.balance.guard import EVENTS, STATES, TRANSITIONS, State
from ballbal_ros.balance.parameters import BalanceParameters
from ballbal_ros.declaration import Declaration, declarations
from ballbal_ros.motion.parameters import CompensationParameters
from ballbal_ros.robot.parameters import RobotParameters
from ballbal_ros.simulation.fault_kinds import KINDS

_ABOUT = """\
# Safety

Written by `python -m ballbal_ros.report.safety_page` from the tables that the loop runs on; a test holds it to them.

The balance node moves a heavy machine beside people. This page says when it sends torque, and what it does about
everything that may be wrong with what it is told. It is no certificate: the machine's own protective stop, stand or
gantry, and the watchdog in the drive are not replaced by it.
"""
_PEOPLE = """\
## What a person has to know

- **Without torque it falls.** Cutting the drive's power, ending the `balance` process, deactivating or cleaning it up
  takes the torque away at once, whatever the state. Do that only while a stand or gantry holds it, or to save a life.
- **To stop it**, publish `emergency_stop` true: arms and ball come to rest and it *stays balanced*, state `stopping`.
  Bring the stand; when `support` says true, torque goes away: `released`. Without a `support` it stays balanced until
  the battery ends: have something that senses the stand publish it. Both are heard only from publishers that are
  reliable and transient local, which is not a publisher's default in ROS; `ballbal checkup` says who is not heard.
- **To go on**, release the emergency stop (`emergency_stop` false), see to what `reason` in `balance_state` says, then
  `ros2 service call /balance/reset std_srvs/srv/Trigger`. From `released` and `tripped` **it then engages by itself**
  as soon as it is upright, still and hears its senses: be clear of it before you reset it. From `stopping` it goes on
  balancing.
- **Tripped means that it falls**, or hangs in its gantry. Nobody belongs within its fall while it balances.
- Where to look: `balance_state` (state and reason; `inactive` is what it says while `unconfigured`), `/diagnostics`,
  and `ballbal checkup`, which reads them and says what to do.
"""
_GUARD = """\
## The guard

A state sends the stated share of the loop's torque, never more than the limits, and never what is not a number. An
event that has no entry in a state changes nothing.
"""
_LIMITS = """\
## Limits on what is sent

| what | parameter |
|---|---|
| torque about any level axis | the lesser of `limits.torque` and `limits.drive_torque`, less what the battery lacks |
| torque about z | what the floor holds: `floor.torsion` times the weight: beyond it, the ball spins |
| change of torque | `limits.torque_rate`; off is at once; with one of three wheels lost, z is free |
| effort of each actuator | `drive.<name>.effort_limit`: the heading gives way first, then all alike |
| power of the drive | `limits.drive_power` |
| speed of the ball | beyond `limits.ball_speed` plans are refused; 0.5 s of it is a controlled stop |
| turning on the spot | beyond `limits.heading_rate` plans and `cmd_vel` are refused |

Torque goes off by itself when the lean is beyond the *capturable region*: the unstable part of lean and lean rate,
φ + φ'/p, against what the drive's torque, the floor's friction and the drive's speed can still bring back, less
`limits.capture_reserve`. It is worked out from the model of the present posture and load, and anew when the battery
sags or an actuator is lost. `limits.trip_lean` is an outer bound.
"""
_NOT_SEEN = """\
## What is not told apart

- A step of a gyro's bias below about 0.02 rad/s, or of an accelerometer's below 0.4 m/s², is not told from a push that
  lasts: the trim leans against it, and the ball goes some centimetres.
- A joint encoder that steps by less than it may move within a tick is believed.
- Two faults at once are answered one by one; that it keeps standing through both is not promised. A hard push on a
  machine with three wheels, one of them dead, may bring it down.
- How the ball turns can't be told from two encoders where nothing holds its spin: a machine with three wheels, one of
  which slides on the ball for a good part of a second and is given up, may fall where no stand takes hold. With four it
  stays.
- A drive that gives less torque than it is sent, all actuators alike, is not measured: the loop's gain margin bears it.
"""


def page() -> str:
    """The whole page as text."""
    return "\n".join((_ABOUT, _PEOPLE, _GUARD, _states(), _transitions(), _LIMITS, _answers(), _NOT_SEEN))


def _states() -> str:
    rows = [f"| `{state.name}` | {_share(state)} | {_with_defaults(state.meaning)} |" for state in STATES.values()]
    return "\n".join(("| state | share of the torque | meaning |", "|---|---|---|", *rows, ""))


def _share(state: State) -> str:
    least, most = state.share
    return f"{least:g}" if least == most else f"{least:g} to {most:g}"


def _transitions() -> str:
    events = list(EVENTS)
    head = f"| from | {' | '.join(events)} |"
    rows = [f"| `{name}` | {' | '.join(TRANSITIONS.get((name, event), '') for event in events)} |" for name in STATES]
    meanings = [f"- *{event}*: {_with_defaults(meaning)}." for event, meaning in EVENTS.items()]
    return "\n".join((head, "|---" * (len(events) + 1) + "|", *rows, "", *meanings, ""))


def _answers() -> str:
    times = (
        "Times are of the condition lasting. Parameters stand with their default; a robot's files may say otherwise. "
        "Where a\nfault is named, `ballbal faults` tries it."
    )
    about = f"## Every input's answer\n\n{times}\n"
    deeds = [f"- **{deed}**: {meaning}." for deed, meaning in DEEDS.items()]
    head = "| input | what is wrong | how it is known | answer | by | fault |"
    rows = [_row(answer) for answer in ANSWERS.values()]
    return "\n".join((about, *deeds, "", head, "|---|---|---|---|---|---|", *rows, ""))


def _row(answer: Answer) -> str:
    steps = ", ".join(step.deed if step.after == 0.0 else f"{step.deed} from {step.after:g} s" for step in answer.steps)
    broken = ", ".join(name for name, kind in KINDS.items() if kind.row == (answer.input, answer.wrong))
    return f"| {answer.input} | {answer.wrong} | {_with_defaults(answer.known)} | {steps} | {answer.by} | {broken} |"


def _declared() -> dict[str, Declaration]:
    """Parameters that the tables name, by their dotted name."""
    classes = (RobotParameters, BalanceParameters, CompensationParameters)
    return {d.name: d for cls in classes for d in declarations(cls) if "." in d.name or "_" in d.name}


def _with_defaults(text: str) -> str:
    """A text with each parameter's name set apart, and its default beside it where it has one."""
    known = _declared()
    names = "|".join(re.escape(name) for name in sorted(known, key=len, reverse=True))

    def told(match: re.Match[str]) -> str:
        """A parameter's name with its default."""
        declared = known[match.group()]
        if not isinstance(declared.default, (int, float)) or isinstance(declared.default, bool):
            return f"`{declared.name}`"
        unit = "" if declared.unit == "-" else f" {declared.unit}"
        return f"`{declared.name}` ({declared.default:g}{unit})"

    return re.sub(rf"(?<![\w.])(?:{names})(?!\w|\.\w)", told, text)


def main() -> None:
    """Write the page into docs/."""
    path = Path(__file__).resolve().parents[2] / "docs" / "safety.md"
    path.write_text(page(), encoding="utf-8")


if __name__ == "__main__":
    main()
