"""What is remembered from one sitting to the next, in napari's own settings."""

from __future__ import annotations

from typing import cast, get_args

from fringespan.viewer.state import Unit

__all__ = ["remember_unit", "remembered_unit"]


def remembered_unit() -> Unit:
    """Return the unit chosen last."""
    from napari.settings import get_plugin_settings

    try:
        unit = get_plugin_settings("fringespan").display.unit
    except (AttributeError, KeyError):
        # the plugin is used without being registered, as from a script
        return "nm"
    return cast("Unit", unit) if unit in get_args(Unit) else "nm"


def remember_unit(unit: Unit) -> None:
    """Keep the unit for the next sitting."""
    from napari.settings import get_plugin_settings

    try:
        get_plugin_settings("fringespan").display.unit = unit
    except (AttributeError, KeyError):
        return
