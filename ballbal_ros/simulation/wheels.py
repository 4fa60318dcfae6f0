"""The same robot with another number of wheels on its ball."""

from __future__ import annotations

import math

import attrs
import numpy as np

from ballbal_ros.robot.description import RobotDescription
from ballbal_ros.robot.drive import Drive
from ballbal_ros.robot.parameters import DriveParameters


def with_wheels(description: RobotDescription, count: int) -> RobotDescription:
    """The robot with ``count`` omniwheels (three or more), evenly around the ball, each like its first one and as far
    from the top, pushing sideways; the robot itself where it has that many.
    """
    given = description.parameters.drive
    if len(given.contacts) == count:
        return description
    like = given.contact[given.contacts[0]]
    down = math.acos(like.point[2] / float(np.linalg.norm(like.point)))
    members = {}
    for index in range(count):
        heading = math.pi * (2 * index + 1) / count
        point = [math.sin(down) * math.cos(heading), math.sin(down) * math.sin(heading), math.cos(down)]
        push = [-math.sin(heading), math.cos(heading), 0.0]
        members[f"wheel_{index + 1}"] = attrs.evolve(like, point=point, push=push)
    drive = DriveParameters(contacts=list(members), contact=members)
    parameters = attrs.evolve(description.parameters, drive=drive)
    return attrs.evolve(
        description, parameters=parameters, drive=Drive.from_parameters(drive, parameters.ball.radius, "drive")
    )
