"""Pictures, all of them: their parts are in `sheets`, `layoutpicture`, `portpicture`, `skymaps` and `cuts`."""

from elbowroom.job.cuts import draw_cuts as draw_cuts
from elbowroom.job.cuts import draw_element_spread as draw_element_spread
from elbowroom.job.layoutpicture import draw_layout as draw_layout
from elbowroom.job.portpicture import PortImpedances as PortImpedances
from elbowroom.job.portpicture import draw_impedance as draw_impedance
from elbowroom.job.portpicture import port_impedances as port_impedances
from elbowroom.job.sheets import picture_name as picture_name
from elbowroom.job.skymaps import draw_sky_maps as draw_sky_maps
