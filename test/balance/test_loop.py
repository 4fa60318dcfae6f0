"""The loop and its caller: who may keep it from engaging."""

from __future__ import annotations

from ballbal_ros.balance.guard import BALANCING, STANDBY
from ballbal_ros.balance.loop import BalanceLoop
from helpers.balancing import balance
from helpers.robots import reach, shelver
from helpers.simulated import robot


def test_it_does_not_engage_while_its_caller_holds_it_back() -> None:
    """On its stand, upright and still, it waits in standby with the caller's reason and sends nothing; let go, it
    balances.
    """
    world, loop = robot(), BalanceLoop(shelver(), balance(), reach().first, reach().loads)
    loop.supported, loop.held_back = True, "ticks come late"
    for tick in range(1500):
        if tick == 1000:
            assert (loop.guard.state, loop.guard.reason) == (STANDBY, "ticks come late")
            loop.held_back = ""
        effort = loop.tick(world.measurement())
        assert tick >= 1000 or not effort.any()
        if loop.guard.state == BALANCING:
            world.support = loop.supported = False
        world.step(effort)
    assert loop.guard.state == BALANCING
    # Whatever it says later changes nothing: who balances goes on.
    loop.held_back = "ticks come late"
    loop.tick(world.measurement())
    assert loop.guard.state == BALANCING
