"""How the simulated robot differs from the model, as real robots do."""

from __future__ import annotations

import math
import xml.etree.ElementTree as ElementTree
from collections.abc import Iterable, Mapping

import attrs
import numpy as np

from ballbal_ros.declaration import build, declarations, flatten
from ballbal_ros.errors import BallbalError, nearest
from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.robot.loads import Load
from ballbal_ros.simulation.parameters import SimulationParameters

WHERE = "--truth"
_LINK_KEYS = {"mass_factor": 1, "center": 3}
_HAND_KEYS = {"load": 1, "load_factor": 1, "pull_factor": 1, "pull_late": 1}
_KEYS = (
    "it takes <hand>.load, <hand>.load_factor, <hand>.pull_factor, <hand>.pull_late, <link>.mass_factor, "
    "<link>.center, imu.tilt, drawn, or a parameter of simulation.yaml"
)


@attrs.frozen(kw_only=True)
class Truth:
    """Differences between the simulated robot and the model; without any, they are the same.

    ``load`` [hand]: true mass in kg of whatever the hand is said to hold; ``load_factor`` [hand]: or its true mass
    over the said one (the inertia scales along). ``pull_factor`` [hand]: what the world truly exerts on a hand over
    what the plan says; ``pull_late`` [hand]: by how much it comes later, s. ``mass_factor`` [link]: true mass and
    inertia of a URDF link over the URDF's; ``center`` [link]: how far (3 numbers, m, link axes) the link's mass centre
    is from the URDF's. ``imu_tilt``: (roll, pitch) in rad by which the IMU is mounted wrongly, about ``base_link``
    axes. ``parameters``: values in place of simulation.yaml's.
    """

    load: Mapping[str, float] = attrs.field(factory=dict)
    load_factor: Mapping[str, float] = attrs.field(factory=dict)
    pull_factor: Mapping[str, float] = attrs.field(factory=dict)
    pull_late: Mapping[str, float] = attrs.field(factory=dict)
    mass_factor: Mapping[str, float] = attrs.field(factory=dict)
    center: Mapping[str, tuple[float, ...]] = attrs.field(factory=dict)
    imu_tilt: tuple[float, float] = (0.0, 0.0)
    parameters: Mapping[str, object] = attrs.field(factory=dict)

    def of_load(self, load: Load) -> Load:
        """What is truly in the hand when ``load`` is said to be; an empty hand is empty."""
        if load.mass <= 0.0:
            return load
        mass = self.load.get(load.hand, load.mass * self.load_factor.get(load.hand, 1.0))
        return Load(load.hand, mass, load.center, load.inertia * (mass / load.mass))

    def of_parameters(self, parameters: SimulationParameters) -> SimulationParameters:
        """The parameters with these in place; raises :class:`BallbalError` for one out of its range."""
        if not self.parameters:
            return parameters
        return build(SimulationParameters, {**flatten(parameters), **self.parameters}, WHERE)


# What a mass model drawn from CAD may be wrong by (common practice, no source): share of mass, m, rad.
_DRAWN_MASS, _DRAWN_CENTER, _DRAWN_TILT = 0.15, 0.01, math.radians(1.0)


def drawn_truth(description: RobotDescription, seed: int) -> Truth:
    """A robot that differs from its URDF at random, everything uniform within its bounds: the mass of each link by up
    to 15 % (its inertia along with it), each coordinate of its mass centre by up to 10 mm, the IMU's tilt by up to 1°
    about each axis.
    """
    rng = np.random.default_rng([seed, 0x7E16])
    root = ElementTree.fromstring(description.drawn_urdf_text)
    links = [str(link.get("name")) for link in root.findall("link") if link.find("inertial/mass") is not None]
    return Truth(
        mass_factor={link: float(1.0 + rng.uniform(-_DRAWN_MASS, _DRAWN_MASS)) for link in links},
        center={link: tuple(rng.uniform(-_DRAWN_CENTER, _DRAWN_CENTER, 3).tolist()) for link in links},
        imu_tilt=(float(rng.uniform(-_DRAWN_TILT, _DRAWN_TILT)), float(rng.uniform(-_DRAWN_TILT, _DRAWN_TILT))),
        parameters={"built": "as_drawn"},
    )


def parse_truth(items: Iterable[str], description: RobotDescription) -> Truth:
    """Make the truth from words ``KEY=VALUE``; lists are separated by commas.

    Keys: ``<hand>.load`` (kg), ``<hand>.load_factor``, ``<hand>.pull_factor``, ``<hand>.pull_late`` (s),
    ``<link>.mass_factor``, ``<link>.center`` (dx,dy,dz in m), ``imu.tilt`` (roll,pitch in rad), ``drawn`` (a seed: see
    :func:`drawn_truth`; what else is named comes in place of what is drawn), and every parameter of simulation.yaml
    (``floor.friction=0.4``). Raises :class:`BallbalError` in one line for an unknown key or a value that does not fit.
    """
    hands = description.parameters.hands.links
    links = [frame.name for frame in description.model.frames if frame.type.name == "BODY"]
    known = {d.name: d.kind for d in declarations(SimulationParameters)}
    structural = {f"{hand}.{key}": n for hand in hands for key, n in _HAND_KEYS.items()}
    structural |= {f"{link}.{key}": n for link in links for key, n in _LINK_KEYS.items()} | {"imu.tilt": 2}
    found: dict[str, dict[str, object]] = {key: {} for key in (*_HAND_KEYS, *_LINK_KEYS, "parameters")}
    drawn = Truth()
    tilt: tuple[float, float] | None = None
    for item in items:
        key, equals, text = item.partition("=")
        key, text = key.strip(), text.strip()
        if not equals or not text:
            raise BallbalError(WHERE, f"{item!r} has no value", "write KEY=VALUE")
        if key in known:
            found["parameters"][key] = _parameter(key, known[key], text)
        elif key == "imu.tilt":
            tilt = (_numbers(key, text, 2)[0], _numbers(key, text, 2)[1])
        elif key == "drawn":
            number = _numbers(key, text, 1)[0]
            if number < 0.0 or number != int(number):
                raise BallbalError(WHERE, f"drawn is {text}", "it takes a seed: a whole number, 0 or more")
            drawn = drawn_truth(description, int(number))
        elif key in structural:
            owner, _, name = key.rpartition(".")
            values = _numbers(key, text, structural[key])
            if name not in ("center", "pull_late") and values[0] <= 0.0:
                raise BallbalError(WHERE, f"{key} is {text}", "it takes a positive number")
            found[name][owner] = values if name == "center" else values[0]
        else:
            remedy = nearest(key, [*known, *structural, "drawn"])
            raise BallbalError(WHERE, f"unknown key {key}", _KEYS if remedy.startswith("known") else remedy)
    merged = {key: {**getattr(drawn, key), **values} for key, values in found.items()}
    return Truth(imu_tilt=drawn.imu_tilt if tilt is None else tilt, **merged)


def _numbers(key: str, text: str, count: int) -> tuple[float, ...]:
    try:
        values = tuple(float(word) for word in text.split(","))
    except ValueError:
        values = ()
    if len(values) != count or not all(math.isfinite(value) for value in values):
        numbers = "a number" if count == 1 else f"{count} numbers, separated by commas"
        raise BallbalError(WHERE, f"{key} is {text!r}", f"it takes {numbers}")
    return values


def _parameter(key: str, kind: str, text: str) -> object:
    return _numbers(key, text, 1)[0] if kind == "double" else text
