"""Commands for trusting a forecaster: forecaster (pin, compare, upgrade), sign, verify."""

import os

from hyperforecast.checks import InputError
from hyperforecast.cli.text import adviser_lines, number, say, short, table

FEW = 5
FILE_OR_SHIPPED = "FILE|shipped"


def add_commands(command):
    """Add the commands for trusting a forecaster; `command` is that of `hyperforecast.cli`."""
    forecaster = command("forecaster", _forecaster, "Which forecaster advises a device: show, pin, compare, upgrade.")
    forecaster.add_argument("--device", required=True, metavar="DIR")
    action = forecaster.add_mutually_exclusive_group()
    action.add_argument("--pin", metavar=FILE_OR_SHIPPED, help="copy it into the device folder; no other advises then")
    action.add_argument("--compare", metavar=FILE_OR_SHIPPED,
                        help="what it would have advised and expected at this device's past boundaries, beside the "
                        "one that advises now")
    action.add_argument("--upgrade", metavar=FILE_OR_SHIPPED, help="compare, then pin it instead")
    action.add_argument("--unpin", action="store_true", help="let any forecaster advise again")
    forecaster.add_argument("--key", metavar="FILE", help="with --pin: public key (PEM) that it, and every upgrade, "
                            "must be signed by")
    forecaster.add_argument("--signature", metavar="FILE", help="of the forecaster, if not its name with .sig")

    sign = command("sign", _sign, "Sign a forecaster with Ed25519; the signature lies beside it, as FILE.sig.")
    sign.add_argument("--forecaster", metavar="FILE")
    sign.add_argument("--key", metavar="FILE", help="private key (PEM) to sign with")
    sign.add_argument("--new-key", metavar="FILE", help="make a private key, and its public one beside it")

    verify = command("verify", _verify, "Verify the signature of a forecaster, a file or the one a device is pinned to.")
    subject = verify.add_mutually_exclusive_group(required=True)
    subject.add_argument("--forecaster", metavar="FILE")
    subject.add_argument("--device", metavar="DIR")
    verify.add_argument("--key", metavar="FILE", help="public key (PEM); a device may have been pinned with one")
    verify.add_argument("--signature", metavar="FILE", help="(the forecaster's name with .sig)")


def _forecaster(options):
    from hyperforecast import device
    from hyperforecast.forecasting.signature import read_public_key

    if options.key and not options.pin:
        raise InputError("--key", "must be given with --pin", "without")
    folder = device.DeviceFolder(options.device)
    if options.pin:
        device.pin_forecaster(folder, options.pin, signature_path=options.signature,
                              public_key=read_public_key(options.key) if options.key else None)
    elif options.unpin:
        device.unpin_forecaster(folder)
    generation = folder.read()
    if options.compare or options.upgrade:
        _compare(options, folder, generation)
        return
    used = device.forecaster_for(folder, generation)
    pin = generation.care.pin
    document = {**_named(used), "pinned": pin is not None, "public_key": pin and pin.public_key,
                "advised": device.advisers(generation.history)}
    how = "the one that ships, not pinned" if pin is None else \
        "pinned; upgrades must be signed" if pin.public_key else "pinned"
    say(options, document, [
        f"Forecaster {used.checksum[:16]}, version {used.version or 'unknown'}, for {used.method}: {how}",
        *adviser_lines(document["advised"])])


def _named(forecaster):
    return {"forecaster": forecaster.checksum, "version": forecaster.version, "method": forecaster.method}


def _compare(options, folder, generation):
    from hyperforecast.device import compare_forecasters, forecaster_for, mean_errors, upgrade_forecaster
    from hyperforecast.forecasting import load_forecaster

    named = options.compare or options.upgrade
    before = forecaster_for(folder, generation)
    after = load_forecaster(generation.carryover.plan.method if named == "shipped" else named)
    compared = compare_forecasters(generation, before, after)
    errors = mean_errors(compared)
    document = {"before": _named(before), "after": _named(after), "boundaries": [one.as_dict() for one in compared],
                "errors": errors, "upgraded": bool(options.upgrade)}
    lines = [f"before: {before.checksum[:16]}, version {before.version or 'unknown'}",
             f"after:  {after.checksum[:16]}, version {after.version or 'unknown'}"]
    if before.checksum == after.checksum:
        lines.append("They are the same.")
    lines += _comparison_lines(compared, errors)
    if options.upgrade:
        upgrade_forecaster(folder, named, signature_path=options.signature)
        lines.append(f"Upgraded: {options.device} is pinned to {after.checksum[:16]}.")
    say(options, document, lines)


def _comparison_lines(compared, errors):
    if not compared:
        return ["No past boundary of this device was advised at; there is nothing to compare."]
    lines = ["Advice at past boundaries, and the accuracy on all classes that each expects of its own", table(
        ("update", "forecaster", "advised settings", "expected (90%)"),
        [(one.update, side, short(one.advised[side]), _interval(one.promised[side]))
         for one in compared for side in ("before", "after")])]
    lines += ["What each expects of the settings that were used, and what came of them", table(
        ("update", "used settings", "achieved", "before expects", "after expects", "nearer"),
        [(one.update, short(one.used), number(one.achieved), _interval(one.expected["before"]),
          _interval(one.expected["after"]), one.nearer or "-") for one in compared])]
    if errors:
        n = sum(one.achieved is not None for one in compared)
        lines.append(f"Mean distance from what was achieved, over {n} updates: "
                     f"before {errors['before']['error']:.3f}, after {errors['after']['error']:.3f}; intervals that held: "
                     f"before {errors['before']['held']:.0%}, after {errors['after']['held']:.0%}")
        if n < FEW:
            lines.append("So few updates tell little; the recipe's figures on held-out sources tell more.")
    return lines


def _interval(expected):
    return f"{expected.value:.2f} ({expected.low:.2f}-{expected.high:.2f})"


def _sign(options):
    from hyperforecast.forecasting import load_forecaster
    from hyperforecast.forecasting.signature import make_key, sign_file

    if not options.new_key and not (options.forecaster and options.key):
        raise InputError("sign", "needs --forecaster and --key, or --new-key", "neither")
    document, lines = {}, []
    if options.new_key:
        public = str(make_key(options.new_key))
        document.update(new_key=options.new_key, public_key=public)
        lines += [f"Private key: {options.new_key}; keep it to yourself, at base",
                  f"Public key: {public}; for the devices"]
    if options.forecaster:
        forecaster = load_forecaster(options.forecaster)
        signature = str(sign_file(options.forecaster, options.key or options.new_key))
        document.update(**_named(forecaster), signature=signature)
        lines.append(f"Signed {forecaster.checksum[:16]}, version {forecaster.version or 'unknown'}: {signature}")
    say(options, document, lines)


def _verify(options):
    from hyperforecast.device import DeviceFolder, pinned_path, verify_pinned
    from hyperforecast.forecasting import forecaster_bytes, load_forecaster
    from hyperforecast.forecasting.signature import read_public_key, read_signature, verify

    key = read_public_key(options.key) if options.key else None
    if options.device:
        folder = DeviceFolder(options.device)
        pin = folder.read().care.pin
        if pin is None:
            raise InputError(options.device, "must be pinned to a forecaster", "no pin")
        verify_pinned(folder, pin, key)
        path = pinned_path(folder, pin)
    elif key is None:
        raise InputError("--key", "must name a public key", "none")
    else:
        path = options.forecaster
        verify(forecaster_bytes(path), read_signature(path, signature_path=options.signature), key,
               name=options.signature or f"{path}.sig", key_name=options.key)
    forecaster = load_forecaster(path)
    say(options, {**_named(forecaster), "verified": True},
        [f"{os.path.basename(path)}: the signature holds; {forecaster.checksum[:16]}, "
         f"version {forecaster.version or 'unknown'}, for {forecaster.method}"])
