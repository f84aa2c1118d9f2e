"""What every controller is: its protocol, its linear form, and how it is saved and loaded.

A controller sees the observation at sample k (columns: every y, one setpoint per controlled
output, measured disturbances, previous applied u; engineering units) and answers with the
requested u. Limits, rate and latency belong to the actuator; a controller may know them.
"""

from idlearn.control.form import FilterForm
from idlearn.control.protocol import Controller, ObservationLayout
from idlearn.control.runner import FilterController, FilterRunner, LinearController
from idlearn.control.storage import FORMAT, KINDS, load_controller, save_controller

__all__ = [
    "FORMAT",
    "KINDS",
    "Controller",
    "FilterController",
    "FilterForm",
    "FilterRunner",
    "LinearController",
    "ObservationLayout",
    "load_controller",
    "save_controller",
]
