"""The plants by name. To add one: a class with the contract of `plant.Plant`, and a row here."""

from collections.abc import Callable

from mock_rig.bead import bead_axis, bead_gantry
from mock_rig.chamber import Chamber
from mock_rig.plant import Plant

PLANTS: dict[str, Callable[[int], Plant]] = {
    "bead_axis": bead_axis,
    "bead_gantry": bead_gantry,
    "chamber": Chamber,
}
