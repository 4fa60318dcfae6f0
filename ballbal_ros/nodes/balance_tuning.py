"""Changed parameters of the balance node: checked, and gains designed, beside the loop; then handed to it."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

from ballbal_ros.balance.changeover import PreparedChange
from ballbal_ros.balance.loop import BalanceLoop
from ballbal_ros.errors import ParameterError
from ballbal_ros.nodes.beside import Beside
from ballbal_ros.nodes.designer import Designer
from ballbal_ros.nodes.parameter_services import ParameterServices
from ballbal_ros.nodes.parameters import NodeParameters
from ballbal_ros.robot.whole_body import WholeBody

if TYPE_CHECKING:
    from ballbal_ros.nodes.balance import BalanceNode

_FILE = "balance.yaml"


class BalanceTuning:
    """The balance node's parameter services; a set is answered once margins are checked on posture and loads."""

    def __init__(self, node: BalanceNode, parameters: NodeParameters) -> None:
        """Declares ``parameters`` on ``node``."""
        self._node, self._parameters = node, parameters
        self._prepared: tuple[BalanceLoop, PreparedChange] | None = None
        self._designer = Designer(node.description, parameters.source(_FILE))
        self._designer.start()
        self._beside = Beside(node, "parameters")
        parameters.declare(self._change, ParameterServices(self._beside.node, node, self._prepare))
        self._beside.start()

    def leave(self) -> None:
        """Answer no more."""
        self._beside.leave()
        self._designer.leave()

    def _prepare(self, wanted: Mapping[str, Any]) -> None:
        """Runs beside the loop, and waits for the designer; raises :class:`BallbalError` in one line."""
        new, loop, node = self._parameters.proposed(wanted), self._node.loop, self._node
        self._prepared = None
        if new is None or loop is None:
            return
        posture = WholeBody(node.description, loop.body.loads.values()).posture(node.arm_position())
        self._prepared = loop, self._designer.prepare(loop.schedule.reach, loop.parameters, new[_FILE], posture)

    def _change(self, new: NodeParameters) -> None:
        """Hand the prepared change to the loop; without a loop the values hold for the one that is made next."""
        loop, prepared, self._prepared = self._node.loop, self._prepared, None
        if loop is not None:
            if prepared is None or prepared[0] is not loop or prepared[1].parameters != new[_FILE]:
                raise ParameterError(
                    self._parameters.source(_FILE), "came while balance was configured", "set it again"
                )
            loop.change_parameters(prepared[1])
            self._node.margins = prepared[1].margins or self._node.margins
        self._node.parameters = new[_FILE]
