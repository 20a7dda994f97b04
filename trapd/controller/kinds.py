"""Which activity answers which kind of request. off and stop never wait in the queue and are not here, nor are
claims and pauses (`claiming.IMMEDIATE`)."""

from __future__ import annotations

from collections.abc import Callable, Mapping

from trapd.controller.activity import Activity
from trapd.controller.declaring import declaring
from trapd.controller.desk import Desk
from trapd.controller.moving import changing
from trapd.controller.scanning import scanning
from trapd.controller.switching import emptying, switching_on
from trapd.controller.ticket import Ticket

ACTIVITIES: Mapping[str, Callable[[Desk, Ticket], Activity]] = {
    "set": changing,
    "go": changing,
    "back": changing,
    "ions": declaring,
    "on": switching_on,
    "empty": emptying,
    "scan": scanning,
}
