"""The controller: the only writer to hardware. Judge, record, step, read back, compare."""

from trapd.controller.adoption import Remembered, adopting
from trapd.controller.controller import Controller
from trapd.controller.desk import Desk
from trapd.controller.situation import Claim, Measured, Moving, Scanning, SchedulePause, Situation
from trapd.controller.ticket import Ticket

__all__ = [
    "Claim",
    "Controller",
    "Desk",
    "Measured",
    "Moving",
    "Remembered",
    "Scanning",
    "SchedulePause",
    "Situation",
    "Ticket",
    "adopting",
]
