"""What runs of plans have taught, as ``arm_compensation`` finds it in the files that its parameter names."""

from __future__ import annotations

from pathlib import Path

from ballbal_ros.errors import BallbalError
from ballbal_ros.motion.learned_file import read_learned
from ballbal_ros.motion.plan_mark import PlanMark
from ballbal_ros.motion.repetition import Learned

ENDING = ".learned.yaml"
_MOST = 200


class LearnedPlans:
    """Knows the learned files of one ``place``: a file, or all files of a folder that end in ``.learned.yaml``.

    They are read when it is made, and those that changed again when a plan comes: to read one takes a tenth of a
    second. No message says which. Raises :class:`BallbalError` where the place is not there.
    """

    def __init__(self, place: Path) -> None:
        if not place.exists():
            raise BallbalError("learned", f"names {place}, which is not there", "give a file or a folder of such")
        self._place = place
        self._known: dict[Path, tuple[tuple[int, int], Learned | BallbalError]] = {}
        self._look()

    def __call__(self, mark: PlanMark) -> tuple[Learned | None, str]:
        """What was learnt for the plan with a mark, or None; and in words what that is, or why it is nothing."""
        self._look()
        reasons = []
        for path, (_, found) in self._known.items():
            if isinstance(found, BallbalError):
                reasons.append(str(found))
            elif found.mark == mark:
                return found, f"{path.name}, {found.runs} run{'s' if found.runs > 1 else ''}"
            elif found.mark.motion == mark.motion:
                changed = f"{path.name} was learnt with another model, load, force, lead-in or grid"
                reasons.insert(0, f"nothing: {changed}; learn anew")
        return None, reasons[0] if reasons else "nothing of this motion"

    def _look(self) -> None:
        """Read what is new or has changed, forget what is gone; what can't be read is kept as why."""
        paths = sorted(self._place.glob(f"*{ENDING}"))[:_MOST] if self._place.is_dir() else [self._place]
        known = {}
        for path in paths:
            try:
                stat = path.stat()
                state = stat.st_mtime_ns, stat.st_size
                before = self._known.get(path)
                known[path] = before if before is not None and before[0] == state else (state, read_learned(path))
            except BallbalError as error:
                known[path] = state, error
            except OSError:
                continue
        self._known = known
