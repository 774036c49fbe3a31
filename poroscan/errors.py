"""What can go wrong in a way that the user can mend.

Every error here is shown by the command line as one line and never as a traceback. Anything else that is raised is a
defect of the program and traces back.
"""

from __future__ import annotations


class PoroscanError(Exception):
    """Something the user can mend; the message names the thing, what is wrong, and what to do."""


class InputError(PoroscanError):
    """A file or folder that cannot be read as what it should be; costs that input, not the run."""


class SettingsError(PoroscanError, ValueError):
    """A recipe, formulation or option that is wrong; nothing is started."""


class StoreError(PoroscanError):
    """A run folder, ledger or atlas that is locked, damaged or of another format."""


class SimulationError(PoroscanError, ArithmeticError):
    """A simulation or phase-equilibrium calculation that cannot be trusted, stopped before it wrote a result."""


class MissingExtraError(PoroscanError, ImportError):
    """A capability whose optional packages are not installed; the message names the extra."""
