"""What the small moves say of each actuator, in plain words."""

from __future__ import annotations

from collections.abc import Sequence

import attrs
import numpy as np

from ballbal_ros.bring_up.hand_turns import EncoderMap
from ballbal_ros.bring_up.moves import SmallMoves
from ballbal_ros.bring_up.pulse import Strength, strength
from ballbal_ros.findings import LOOK, OK, WRONG, Finding
from ballbal_ros.robot.arrays import Array
from ballbal_ros.robot.drive import Drive

_AREA, _ENCODER, _DRIVE = "actuator", "encoder", "drive"
_FITS, _AS_GOOD = 0.4, 0.1
_CONSTANT = 0.15
_COARSE = 1.5
_SLOW = 100.0


@attrs.frozen
class Verdict:
    """What the moves say: findings, and the ``delay`` from a command to its torque, s; NaN where nothing moved."""

    findings: list[Finding]
    delay: float


def judge_moves(encoders: EncoderMap, moves: SmallMoves, by_hand: bool) -> Verdict:
    """Order, sign and torque constant of each actuator, resolution of each encoder; ``by_hand``: whether the encoders
    were checked before.
    """
    drive, strengths, found = moves.drive, [], []
    for index in range(len(drive.names)):
        measured, finding = _actuator(encoders, moves, index, by_hand)
        found.append(finding)
        if measured is not None:
            strengths.append(measured)
    found += _all_alike([abs(measured.factor) for measured in strengths])
    for index in range(len(drive.names)):
        found += _resolution(drive, encoders, moves, index)
    if 1.0 / moves.period < _SLOW:
        do = "have the driver publish at the rate of the loop"
        found.append(Finding(_DRIVE, "drive_states", LOOK, f"comes with {1.0 / moves.period:.0f} Hz only", do))
    delays = [measured.delay for measured in strengths]
    return Verdict(found, float(np.median(delays)) if delays else float("nan"))


def _actuator(encoders: EncoderMap, moves: SmallMoves, index: int, by_hand: bool) -> tuple[Strength | None, Finding]:
    """How hard it pushes, and what that means; None where it can't be told."""
    drive, answer = moves.drive, moves.answers[index]
    name = drive.names[index]
    heard = {contact for contact, scale in zip(encoders.contact, encoders.scale) if scale}
    if index not in heard:
        what = "can't be told: no encoder that can be trusted is on its wheel"
        return None, Finding(_AREA, name, WRONG, what, "mend the encoder first, then come back")
    if not answer:
        do = "is it enabled? check its fuse, cable, brake, and that the driver takes drive_command by this name"
        return None, Finding(_AREA, name, WRONG, f"moves nothing, up to {moves.largest[index]:.2g} N m", do)
    responses = [response for response in (record.response() for record in answer) if response is not None]
    if not responses:
        do = "raise --share a little, or have drive_states published faster"
        return None, Finding(_AREA, name, WRONG, "moves, but too short a way to tell how", do)
    factors, misfits = _fits(moves.model, np.mean(responses, axis=0))
    drives = int(np.argmin(misfits))
    if misfits[index] <= misfits[drives] + _AS_GOOD:
        drives = index
    if misfits[drives] > _FITS:
        do = "is the ball free, every wheel on it? do the others first, then this one again"
        return None, Finding(_AREA, name, WRONG, "the wheels answer it as they would answer no actuator", do)
    each = [strength(record, drive, moves.ball_inertia, drives, factors[drives]) for record in answer]
    measured = Strength(*np.mean([attrs.astuple(one) for one in each], axis=0).tolist())
    return measured, _words(drive, index, drives, measured, "" if by_hand else ", or its encoder does")


def _fits(model: Array, response: Array) -> tuple[list[float], list[float]]:
    """For each contact: the factor that fits its expected response best, and what is left, as a share."""
    known = np.isfinite(response)
    seen = response[known]
    size = float(np.linalg.norm(seen))
    factors, misfits = [], []
    for column in model.T:
        expected = column[known]
        factor = float(seen @ expected / (expected @ expected))
        factors.append(factor)
        misfits.append(float(np.linalg.norm(seen - factor * expected)) / max(size, 1e-12))
    return factors, misfits


def _words(drive: Drive, index: int, drives: int, measured: Strength, unsure: str) -> Finding:
    name, parts, remedies = drive.names[index], [], []
    if drives != index:
        other = drive.names[drives]
        parts.append(f"its command drives {other}")
        remedies.append(f"swap {name} and {other} in the driver, or their plugs")
    if measured.factor < 0.0:
        parts.append(f"pushes the wrong way{unsure.replace('does', 'counts so')}")
        remedies.append("turn the sign of its effort in the driver")
    size = abs(measured.factor)
    if not abs(size - 1.0) <= _CONSTANT:
        parts.append(f"gives {size:.2f} times the torque that it is sent{unsure.replace('does', 'counts so much')}")
        remedies.append(f"multiply its torque constant (N m/A) in the driver by {size:.2f}")
    if not parts:
        what = f"right wheel, right way, {size:.2f} times the torque that it is sent"
        return Finding(_AREA, name, OK, f"{what}, friction {measured.friction:.2g} N m")
    return Finding(_AREA, name, WRONG, "; ".join(parts), "; ".join(remedies))


def _all_alike(sizes: Sequence[float]) -> list[Finding]:
    """Where all are off by one factor, the model may be: its ball's inertia."""
    if len(sizes) < 2:
        return []
    mean = float(np.mean(sizes))
    if abs(mean - 1.0) <= _CONSTANT or max(sizes) - min(sizes) > 0.1 * mean:
        return []
    do = f"is ball.inertia right? {1.0 / mean:.2f} times as much, wheels and rotors with it, would look the same"
    return [Finding(_DRIVE, "all alike", LOOK, f"every actuator gives {mean:.2f} times what it is sent", do)]


def _resolution(drive: Drive, encoders: EncoderMap, moves: SmallMoves, index: int) -> list[Finding]:
    """Whether an encoder counts in steps as fine as robot.yaml has them; nothing where they are."""
    scale, step = abs(encoders.scale[index]), float(moves.smallest_step[index])
    if not scale or not np.isfinite(step):
        return []
    contact, described = encoders.contact[index], float(drive.encoder_step[encoders.contact[index]])
    if described <= 0.0 or step / scale <= _COARSE * described:
        return []
    name = drive.names[index]
    what = f"counts in steps of {step / scale:.2g} rad, encoder_step of robot.yaml says {described:.2g}"
    do = f"set drive.{drive.names[contact]}.encoder_step to {step / scale:.2g}, or have the driver count every edge"
    return [Finding(_ENCODER, f"{name}, steps", LOOK, what, do)]
