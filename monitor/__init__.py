"""limbtell: a monitor that tells torque from the world from torque of the robot itself."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from monitor.robot.robot import Robot

__all__ = ["Robot"]


def __getattr__(name: str) -> Any:
    """Import `Robot` when first asked for: it loads compiled kernels, which a mere import should not."""
    if name == "Robot":
        from monitor.robot.robot import Robot

        return Robot
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
