"""The parameter services of a node: the same check and line for whoever sets a value, in whichever thread may wait."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from typing import Any

from rcl_interfaces.msg import Parameter as ParameterMessage
from rcl_interfaces.msg import SetParametersResult
from rcl_interfaces.srv import (
    DescribeParameters,
    GetParameters,
    GetParameterTypes,
    ListParameters,
    SetParameters,
    SetParametersAtomically,
)
from rclpy.exceptions import ParameterException
from rclpy.node import Node
from rclpy.parameter import Parameter
from rclpy.qos import qos_profile_parameters

from ballbal_ros.errors import BallbalError


class ParameterServices:
    """The six services by which ``ros2 param`` and everybody else gets at a node's parameters.

    ``host`` is the node whose thread answers, ``node`` itself or one beside it; ``node`` is made without services of
    ROS's own. ``prepare`` takes the wanted values (name → value) before they are set, may take as long as that thread
    may, and raises :class:`BallbalError` with the reason to refuse.
    """

    def __init__(self, host: Node, node: Node, prepare: Callable[[Mapping[str, Any]], object]) -> None:
        self._node, self._prepare = node, prepare
        for kind, name, answer in (
            (DescribeParameters, "describe_parameters", self._describe),
            (GetParameters, "get_parameters", self._get),
            (GetParameterTypes, "get_parameter_types", self._types),
            (ListParameters, "list_parameters", self._list),
            (SetParameters, "set_parameters", self._set_each),
            (SetParametersAtomically, "set_parameters_atomically", self._set_all),
        ):
            full = f"{node.get_fully_qualified_name()}/{name}"
            host.create_service(kind, full, answer, qos_profile=qos_profile_parameters)

    def _known(self, names: Sequence[str]) -> list[str]:
        """The names, or none of them where one is unknown: so ROS answers."""
        return list(names) if all(self._node.has_parameter(name) for name in names) else []

    def _describe(self, request: Any, response: Any) -> Any:
        response.descriptors = self._node.describe_parameters(self._known(request.names))
        return response

    def _get(self, request: Any, response: Any) -> Any:
        names = self._known(request.names)
        response.values = [self._node.get_parameter_or(name, Parameter(name)).get_parameter_value() for name in names]
        return response

    def _types(self, request: Any, response: Any) -> Any:
        response.types = [self._node.get_parameter_type(name) for name in self._known(request.names)]
        return response

    def _list(self, request: Any, response: Any) -> Any:
        response.result = self._node.list_parameters(request.prefixes, request.depth)
        return response

    def _set_each(self, request: Any, response: Any) -> Any:
        response.results = [self._set([message]) for message in request.parameters]
        return response

    def _set_all(self, request: Any, response: Any) -> Any:
        response.result = self._set(request.parameters)
        return response

    def _set(self, messages: Sequence[ParameterMessage]) -> SetParametersResult:
        try:
            wanted = [Parameter.from_parameter_msg(message) for message in messages]
            self._prepare({parameter.name: plain(parameter.value) for parameter in wanted})
            result: SetParametersResult = self._node.set_parameters_atomically(wanted)
        except (BallbalError, ParameterException) as error:
            return SetParametersResult(successful=False, reason=" ".join(str(error).split()))
        except Exception as error:
            return SetParametersResult(successful=False, reason=f"{type(error).__name__}: {error}")
        return result


def plain(value: Any) -> Any:
    """Lists for what ROS gives as arrays; what can't be compared otherwise stays as it is."""
    return list(value) if hasattr(value, "__iter__") and not isinstance(value, (str, bytes)) else value
