"""Task kinds: where robots go for a task. One file a kind, one line in a table."""

from collections.abc import Mapping

from ..files.plugins import extended
from .base import Goals, Scene, Task, distance
from .cover import Cover
from .encircle import Encircle
from .follow import Follow
from .formation import Formation
from .patrol import Patrol
from .sweep import Sweep
from .target import Located
from .visit import Visit
from .watch import Watch

KINDS: dict[str, type[Task]] = {
    kind.kind: kind
    for kind in (Visit, Patrol, Watch, Sweep, Cover, Encircle, Follow, Formation)
}
"""Name in a team file to kind; other packages add theirs by the entry point
``allocator_node.tasks``."""


def known_kinds() -> Mapping[str, type[Task]]:
    """Give the table with the task kinds of other packages added.

    Raises:
        PluginError: If one of those cannot be used.
    """
    return extended(KINDS, "allocator_node.tasks", Task)


__all__ = [
    "KINDS",
    "Cover",
    "Encircle",
    "Follow",
    "Formation",
    "Goals",
    "Located",
    "Patrol",
    "Scene",
    "Sweep",
    "Task",
    "Visit",
    "Watch",
    "distance",
    "known_kinds",
]
