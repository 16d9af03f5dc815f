"""What can be wrong with what a person asks of the simulator."""


class SimError(Exception):
    """Anything this room raises on purpose."""


class UnknownScene(SimError):
    """No scene has that name."""


class FaultError(SimError):
    """A fault list does not read."""
