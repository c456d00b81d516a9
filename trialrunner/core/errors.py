"""Errors of the pure part. Each text names the thing, what was expected, found, and what to do."""


class CoreError(Exception):
    """Base of the core's errors; its text is fit for an operator."""


class ShapeError(CoreError, ValueError):
    """An array does not have the shape that the settings imply."""


class SettingError(CoreError, ValueError):
    """Settings that are each allowed do not fit together."""


class TransitionError(CoreError, RuntimeError):
    """The state machine was handed an event that its state does not take."""


def require_shape(name: str, array: object, expected: tuple[int, ...]) -> None:
    """Raise ShapeError naming the array, the expected and the found shape."""
    found = getattr(array, "shape", None)
    if found != expected:
        raise ShapeError(f"{name}: expected shape {expected}, found {found}")
