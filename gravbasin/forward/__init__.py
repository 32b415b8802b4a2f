"""Gravity of axisymmetric sections: rings in closed form, layered prisms by FFT, harmonica as the reference."""

from gravbasin.forward.audit import Audit, audit_anomaly
from gravbasin.forward.cost import GridCost
from gravbasin.forward.layers import grid_anomaly, layered_prisms
from gravbasin.forward.reference import harmonica_anomaly, tesseroid_anomaly
from gravbasin.forward.rings import RingTable, ring_anomaly, ring_table
from gravbasin.forward.selfcheck import Check, run_selfcheck

__all__ = [
    "Audit",
    "Check",
    "GridCost",
    "RingTable",
    "audit_anomaly",
    "grid_anomaly",
    "harmonica_anomaly",
    "layered_prisms",
    "ring_anomaly",
    "ring_table",
    "run_selfcheck",
    "tesseroid_anomaly",
]
