"""Close out a laser-ablation campaign: how much energy did each shot really absorb?"""

from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from reconcile.notebook import open_campaign as open  # noqa: A004 - the name that a person types

__version__ = "0.1.0"
__all__ = ["__version__", "open"]


def __getattr__(name: str) -> Any:
    """Load `open` only when it is asked for: `import reconcile` must come at once."""
    if name == "open":
        from reconcile.notebook import open_campaign

        return open_campaign
    message = f"module 'reconcile' has no attribute {name!r}"
    raise AttributeError(message)
