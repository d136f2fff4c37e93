"""Every exception that fellwalk raises by itself; all derive from FellwalkError."""


class FellwalkError(Exception):
    """Base of all exceptions of this package."""


class ArgumentError(FellwalkError, ValueError):
    """An argument has the wrong shape, type or value."""


class RecordError(FellwalkError):
    """A record file cannot be made, opened, read or written."""


class DamagedRecordError(RecordError):
    """A record file is cut short, or what it holds does not agree with its checksums."""


class RecordInUseError(RecordError):
    """Another run is writing the same record."""


class OtherModelError(RecordError):
    """The record was made with another model than the one it is to go on with."""


class RecordExistsError(RecordError):
    """A file stands where the new record is to go."""


class ShapeError(ArgumentError):
    """An array has the wrong shape or dtype."""


class MetricError(ArgumentError):
    """A metric is not positive definite."""


class DensityError(FellwalkError, TypeError):
    """The user's function gave something that is not a log density, a gradient or a Hessian product."""


class StartError(FellwalkError, ValueError):
    """The log density or its gradient is not finite at a starting point."""


class NotWrittenError(DensityError):
    """A compiled function returned 0 without having written its results (a swallowed exception, most likely)."""


class InfiniteDensityError(DensityError):
    """The log density is plus infinity, so the function is not the logarithm of a density."""


class CallbackStop(FellwalkError):
    """A compiled function returned a negative code: it asked to stop."""


class Interrupted(FellwalkError):
    """A call was interrupted inside a transition; the chain is as it was before that transition."""


class StateError(FellwalkError, ValueError):
    """Stored chain state is damaged, or belongs to a chain of other settings."""


class BusyError(FellwalkError):
    """One chain was used from two threads at once."""


class SettleError(FellwalkError):
    """A chain that has not settled was asked for draws, or the other way round."""


class WorkerError(FellwalkError):
    """Workers died, cannot run the density, or run another one; what was written before is safe."""


class RemoteError(FellwalkError):
    """The density raised, in another process, an exception that cannot be brought home as it was."""


class AuditError(FellwalkError, ValueError):
    """The density is wrong where a run was to start: its gradient, or something that a run cannot stand."""
