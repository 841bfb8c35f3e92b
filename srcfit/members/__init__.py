"""Member kinds, one data file each. To add one: write its file and its line here."""

from srcfit.member import MemberKind
from srcfit.members.aquifer import AQUIFER
from srcfit.members.beam import BEAM
from srcfit.members.cable import CABLE
from srcfit.members.column import COLUMN
from srcfit.members.conductor import CONDUCTOR
from srcfit.members.cylinder import CYLINDER
from srcfit.members.general import GENERAL_2
from srcfit.members.radial_aquifer import RADIAL_AQUIFER
from srcfit.members.rod import ROD
from srcfit.members.shaft import SHAFT
from srcfit.members.sphere import SPHERE
from srcfit.members.wall import WALL

MEMBERS: dict[str, MemberKind] = {
    kind.name: kind
    for kind in (
        ROD, CABLE, CONDUCTOR, BEAM, SHAFT, WALL, CYLINDER, SPHERE, COLUMN, AQUIFER,
        RADIAL_AQUIFER, GENERAL_2,
    )
}  # fmt: skip
