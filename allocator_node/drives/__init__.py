"""Drive models: how a command moves a robot. One file a model, one line in a table."""

from collections.abc import Mapping

from ..files.plugins import extended
from .aerial import Aerial
from .base import AXES, Drive
from .carlike import Carlike
from .differential import Differential
from .fleet import Fleet, level
from .holonomic import Holonomic

DRIVES: dict[str, type[Drive]] = {
    drive.model: drive for drive in (Differential, Holonomic, Carlike, Aerial)
}
"""Name in a team file to model; other packages add theirs by the entry point
``allocator_node.drives``."""


def known_drives() -> Mapping[str, type[Drive]]:
    """Give the table with the drive models of other packages added.

    Raises:
        PluginError: If one of those cannot be used.
    """
    return extended(DRIVES, "allocator_node.drives", Drive)


__all__ = [
    "AXES",
    "DRIVES",
    "Aerial",
    "Carlike",
    "Differential",
    "Drive",
    "Fleet",
    "Holonomic",
    "known_drives",
    "level",
]
