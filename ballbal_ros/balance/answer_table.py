"""Every input's answer: what is wrong with it, and what the balance does then, after how long.

The loop, the node and the fault campaign all read this one table; ``docs/safety.md`` is printed from it. Times are s
of the condition lasting without a break (a few good samples in between are a break, one is not).
"""

from __future__ import annotations

from ballbal_ros.balance.answers import Answer
from ballbal_ros.balance.request_answers import ASKED
from ballbal_ros.balance.sense_answers import SENSED

ANSWERS: dict[tuple[str, str], Answer] = {(row.input, row.wrong): row for row in (*SENSED, *ASKED)}
