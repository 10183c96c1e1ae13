"""Ports, S-matrices and references of excitation: pure functions of matrices at one frequency."""

from vop.network.conditioning import PowerInterval, accepted_power_interval
from vop.network.connection import (
    THROUGH,
    Feed,
    PortChange,
    accepted_power,
    connect,
    feed_of_blocks,
    port_powers,
    reflection,
    renormalise,
    shift_reference_plane,
    terminate,
)
from vop.network.elements import cascade, parallel_rlc, series_rlc, series_two_port, shunt_two_port
from vop.network.matching import LSection, Matched, l_sections, match_array
from vop.network.parameters import s_to_y, s_to_z, y_to_s, z_to_s
from vop.network.references import ReferenceChange, from_forward_power, to_forward_power
from vop.network.touchstone import Scattering, read_touchstone

__all__ = [
    "THROUGH",
    "Feed",
    "LSection",
    "Matched",
    "PortChange",
    "PowerInterval",
    "ReferenceChange",
    "Scattering",
    "accepted_power",
    "accepted_power_interval",
    "cascade",
    "connect",
    "feed_of_blocks",
    "from_forward_power",
    "l_sections",
    "match_array",
    "parallel_rlc",
    "port_powers",
    "read_touchstone",
    "reflection",
    "renormalise",
    "s_to_y",
    "s_to_z",
    "series_rlc",
    "series_two_port",
    "shift_reference_plane",
    "shunt_two_port",
    "terminate",
    "to_forward_power",
    "y_to_s",
    "z_to_s",
]
