"""``liveres devices``: the sound devices PortAudio finds."""

from __future__ import annotations

import argparse
import json

from liveres.hosts.portaudio import import_sounddevice


def run(args: argparse.Namespace) -> int:
    """Print the devices; 0 also when there are none.

    Raises : DeviceError - PortAudio is missing or cannot start
    """
    sounddevice = import_sounddevice()
    systems = sounddevice.query_hostapis()
    first_in, first_out = sounddevice.default.device
    devices = [
        {
            "number": number,
            "name": one["name"],
            "host": systems[one["hostapi"]]["name"],
            "inputs": one["max_input_channels"],
            "outputs": one["max_output_channels"],
            "rate_hz": one["default_samplerate"],
            "default_input": number == first_in,
            "default_output": number == first_out,
        }
        for number, one in enumerate(sounddevice.query_devices())
    ]
    if args.json:
        print(json.dumps({"devices": devices, "portaudio": sounddevice.get_portaudio_version()[1]}))
    elif devices:
        print("\n".join(_lines(devices)))
    else:
        print("PortAudio runs and finds no sound device: connect one, or check that sound works in another program")
    return 0


def _lines(devices: list[dict]) -> list[str]:
    wide = max(len("name"), *(len(one["name"]) for one in devices))
    far = max(len("host"), *(len(one["host"]) for one in devices))
    lines = [f"{'':4} {'no':>3}  {'name':<{wide}}  {'host':<{far}}  in  out  rate Hz"]
    for one in devices:
        mark = f"{'->' if one['default_input'] else '':2}{'<-' if one['default_output'] else '':2}"
        lines.append(
            f"{mark} {one['number']:>3}  {one['name']:<{wide}}  {one['host']:<{far}} "
            f"{one['inputs']:>3}  {one['outputs']:>3}  {one['rate_hz']:g}"
        )
    return [*lines, "", "-> default input, <- default output"]
