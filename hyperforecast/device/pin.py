"""The forecaster that a device is pinned to: no other advises there until somebody upgrades.

    DIR/0123456789abcdef.forecaster        a copy of it, named by the first digits of its checksum
    DIR/0123456789abcdef.forecaster.sig    its signature, where one was asked for

The pin itself, the whole checksum and perhaps a public key, lies in the generation (`hyperforecast.device.care`), and
pinning, upgrading and unpinning are steps of the device's life.
"""

from dataclasses import replace

from hyperforecast.checks import InputError
from hyperforecast.device.care import Pin
from hyperforecast.forecasting import forecaster_bytes, load_forecaster
from hyperforecast.forecasting.signature import SUFFIX, read_signature, verify
from hyperforecast.storage import LARGEST_ARRAY, read_bytes, write_atomically

SHORT = 16
ENDING = ".forecaster"


def forecaster_for(folder, generation, *, given=None):
    """Return the `Forecaster` that may advise on a device.

    Parameters
    ----------
    folder : DeviceFolder
    generation : Generation
        Its current one.
    given : Forecaster, optional
        By default the pinned one, or the one that ships for the method if none is pinned.

    Raises
    ------
    InputError
        If another one is given than is pinned, or the pinned one is missing or altered.
    """
    pin = generation.care.pin
    if pin is None:
        return load_forecaster(generation.carryover.plan.method) if given is None else given
    if given is None:
        given = load_forecaster(pinned_path(folder, pin))
    if given.checksum != pin.checksum:
        raise InputError("forecaster", f"must be the one that the device is pinned to, {pin.checksum[:SHORT]}",
                         given.checksum[:SHORT] or "one without a checksum",
                         "leave it out, or compare and upgrade: hyperforecast forecaster --device DIR --upgrade FILE")
    return given


def advisers(history):
    """Return a list of {"forecaster", "version", "updates"}: which forecasters advised which updates of a history."""
    found = {}
    for entry in history:
        if entry["forecaster"]:
            found.setdefault((entry["forecaster"], entry.get("forecaster_version")), []).append(entry["number"])
    return [{"forecaster": checksum, "version": version, "updates": updates}
            for (checksum, version), updates in found.items()]


def pinned_path(folder, pin):
    """Return the path of the copy that a `Pin` names."""
    return folder.path / f"{pin.checksum[:SHORT]}{ENDING}"


def pin_forecaster(folder, source, *, public_key=None, signature_path=None):
    """Pin a device to a forecaster; return that `Forecaster`.

    Parameters
    ----------
    folder : DeviceFolder
    source : str or Path
        A forecaster file, or "shipped": the one that ships for the device's method.
    public_key : bytes, optional
        An Ed25519 key in PEM. The file's signature is verified, and that of every later upgrade.
    signature_path : str or Path, optional
        By default the name of the file with ".sig".

    Raises
    ------
    InputError
        If the file is no forecaster for the device's method, its signature does not hold, or another one is pinned.
    """
    def agreed(pin, forecaster):
        if pin is not None and pin.checksum != forecaster.checksum:
            raise InputError("forecaster", f"must be the one that is pinned already, {pin.checksum[:SHORT]}",
                             forecaster.checksum[:SHORT], "use --upgrade, or --unpin first")
        if public_key is None and pin is not None:
            return pin
        return Pin(forecaster.checksum, None if public_key is None else public_key.decode("ascii", "replace"))

    return _adopt(folder, source, signature_path, "forecaster pinned", agreed)


def upgrade_forecaster(folder, source, *, signature_path=None):
    """Pin a device to another forecaster than before; arguments, result and errors as `pin_forecaster`.

    Where a public key was given when it was pinned, the new file's signature must hold.
    """
    def agreed(pin, forecaster):
        if pin is None:
            raise InputError(folder.path, "must be pinned to a forecaster before it is upgraded", "no pin", "use --pin")
        return Pin(forecaster.checksum, pin.public_key)

    return _adopt(folder, source, signature_path, "forecaster upgraded", agreed)


def unpin_forecaster(folder):
    """Let a device be advised by any forecaster again; `InputError` if it is not pinned."""
    with folder.locked():
        current = folder.read()
        if current.care.pin is None:
            raise InputError(folder.path, "must be pinned to a forecaster", "no pin")
        care = current.care.with_step("forecaster unpinned", current.history, forecaster=current.care.pin.checksum)
        folder.store(current.carryover, current.history, replace(care, pin=None), in_place=True)
        _remove_copies(folder, None)


def verify_pinned(folder, pin, public_key=None):
    """Verify the signature of the copy that a `Pin` names, by `public_key` (PEM, bytes) or the pin's own.

    Raises
    ------
    InputError
        If it does not hold, or there is no signature or key.
    """
    if public_key is None and pin.public_key is None:
        raise InputError("public key", "must be named, as the device was pinned without one", "none", "use --key")
    path = pinned_path(folder, pin)
    verify(read_bytes(path, largest=LARGEST_ARRAY), read_signature(path),
           pin.public_key.encode() if public_key is None else public_key, name=f"{path}{SUFFIX}")


def _adopt(folder, source, signature_path, step, agreed):
    with folder.locked():
        current = folder.read()
        method = current.carryover.plan.method
        shipped = source == "shipped"
        forecaster = load_forecaster(method if shipped else source)
        if forecaster.method != method:
            raise InputError(source, f"must be a forecaster for {method}, the method of the plan", forecaster.method)
        pin = agreed(current.care.pin, forecaster)
        data, signature = forecaster_bytes(method if shipped else source), None
        if pin.public_key is not None:
            if shipped and signature_path is None:
                raise InputError("signature", "must be named for the forecaster that ships", "none", "use --signature")
            signature = read_signature(source, signature_path=signature_path)
            verify(data, signature, pin.public_key.encode(), name=signature_path or f"{source}{SUFFIX}")
        copy = pinned_path(folder, pin)
        write_atomically(copy, data)
        if signature is not None:
            write_atomically(f"{copy}{SUFFIX}", signature)
        if load_forecaster(copy).checksum != pin.checksum:
            raise InputError(source, "must stay the same while it is copied", "another content", "try again")
        told = {"forecaster": pin.checksum, "forecaster_version": forecaster.version, "signed": signature is not None}
        if current.care.pin is not None and current.care.pin.checksum != pin.checksum:
            told["before"] = current.care.pin.checksum
        if pin != current.care.pin:
            care = replace(current.care.with_step(step, current.history, **told), pin=pin)
            folder.store(current.carryover, current.history, care, in_place=True)
        _remove_copies(folder, copy)
    return forecaster


def _remove_copies(folder, kept):
    for path in folder.path.glob(f"*{ENDING}*"):
        if kept is None or not path.name.startswith(kept.name):
            path.unlink(missing_ok=True)
