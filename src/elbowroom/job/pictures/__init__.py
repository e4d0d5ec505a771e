"""Pictures, all of them, on `sheets`.

Stations (`layouts`), ports (`ports`), ports driven at once (`active`), skies (`skymaps`), cuts (`cuts`), one antenna (`antenna`).
"""

from elbowroom.job.pictures.cuts import draw_cuts as draw_cuts
from elbowroom.job.pictures.cuts import draw_element_spread as draw_element_spread
from elbowroom.job.pictures.layouts import draw_layout as draw_layout
from elbowroom.job.pictures.layouts import missing_antennas as missing_antennas
from elbowroom.job.pictures.ports import PortImpedances as PortImpedances
from elbowroom.job.pictures.ports import draw_impedance as draw_impedance
from elbowroom.job.pictures.ports import port_impedances as port_impedances
from elbowroom.job.pictures.sheets import picture_name as picture_name
from elbowroom.job.pictures.skymaps import draw_sky_maps as draw_sky_maps
