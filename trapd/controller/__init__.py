"""The controller: the only writer to hardware. Judge, record, step, read back, compare."""

from trapd.controller.adoption import Remembered, adopting
from trapd.controller.controller import Controller
from trapd.controller.desk import Desk
from trapd.controller.situation import Moving, Situation
from trapd.controller.ticket import Ticket

__all__ = ["Controller", "Desk", "Moving", "Remembered", "Situation", "Ticket", "adopting"]
