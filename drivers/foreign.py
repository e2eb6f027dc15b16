"""The one place where errors of foreign libraries become errors of `drivers.errors`."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager

from drivers.errors import BackendUnavailable, DriverError, LinkDown, LinkTimeout, ReplyGarbled


def map_foreign_error(error: BaseException, where: str) -> DriverError:
    """Return the driver error that an error of pyvisa, pyvisa-py, pyserial or the system stands for."""
    text = f"{where}: {type(error).__name__}: {error}"
    kind = _visa_kind(error) or _serial_kind(error) or _system_kind(error)
    return kind(text)


def _visa_kind(error: BaseException) -> type[DriverError] | None:
    from pyvisa import errors, rname
    from pyvisa.constants import StatusCode

    if isinstance(error, errors.VisaIOError | errors.VisaIOWarning):
        code = error.error_code
        if code == StatusCode.error_timeout:
            return LinkTimeout
        if code in (
            StatusCode.error_serial_parity,
            StatusCode.error_serial_framing,
            StatusCode.error_serial_overrun,
            StatusCode.error_raw_read_protocol_violation,
            StatusCode.error_output_protocol_violation,
            StatusCode.error_input_protocol_violation,
        ):
            return ReplyGarbled
        if code in (
            StatusCode.error_library_not_found,
            StatusCode.error_invalid_resource_name,
            StatusCode.error_nonsupported_operation,
            StatusCode.error_nonsupported_attribute,
            StatusCode.error_resource_locked,
            StatusCode.error_resource_busy,
            StatusCode.error_interface_number_not_configured,
            StatusCode.error_machine_not_available,
            StatusCode.error_no_permission,
        ):
            return BackendUnavailable
        return LinkDown
    if isinstance(error, errors.InvalidBinaryFormat):
        return ReplyGarbled
    if isinstance(error, errors.InvalidSession):
        return LinkDown
    if isinstance(error, errors.Error | rname.InvalidResourceName):
        return BackendUnavailable
    return None


def _serial_kind(error: BaseException) -> type[DriverError] | None:
    from serial import SerialException, SerialTimeoutException

    if isinstance(error, SerialTimeoutException):
        return LinkTimeout
    return LinkDown if isinstance(error, SerialException) else None


def _system_kind(error: BaseException) -> type[DriverError]:
    if isinstance(error, TimeoutError):
        return LinkTimeout
    if isinstance(error, UnicodeError):
        return ReplyGarbled
    if isinstance(error, ImportError | NotImplementedError):
        return BackendUnavailable
    return LinkDown  # OSError and what the backends raise bare: the conversation is over


@contextmanager
def mapped_errors(where: str) -> Iterator[None]:
    """Raise whatever comes from a foreign library as one of `drivers.errors`, the original as its cause."""
    try:
        yield
    except DriverError:
        raise
    except Exception as error:
        raise map_foreign_error(error, where) from error
