"""Which species the guard holds a state to, given what is in the trap."""

from __future__ import annotations

from dataclasses import dataclass

from trapd.guard.model import GuardModel
from trapd.physics.species import Species
from trapd.setpoint import Contents

NOBODY = Contents(presence="none")


@dataclass(frozen=True, kw_only=True)
class Watched:
    """``enforced``: a broken rule refuses. ``incoming``: must be stable at the end of the move, the rest only warns.
    ``shown``: everything is computed and shown, nothing is enforced."""

    enforced: tuple[Species, ...] = ()
    incoming: tuple[Species, ...] = ()
    shown: tuple[Species, ...] = ()

    @property
    def everybody(self) -> tuple[Species, ...]:
        return self.enforced + self.incoming + self.shown


def watched(model: GuardModel, contents: Contents) -> Watched:
    """Held: those species. Unknown: those last held, before anything was declared the whole catalogue. Loading: those
    held, and the incoming. None: nobody, the catalogue is shown."""
    catalogue = tuple(model.catalogue.values())
    if contents.presence == "none":
        return Watched(shown=catalogue)
    held = tuple(model.catalogue[name] for name in contents.ions)
    if contents.presence == "unknown":
        return Watched(enforced=held or catalogue)
    if contents.presence == "loading":
        incoming = tuple(model.catalogue[name] for name in contents.incoming if name not in contents.ions)
        return Watched(enforced=held, incoming=incoming)
    return Watched(enforced=held)
