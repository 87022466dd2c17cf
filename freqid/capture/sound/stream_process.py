"""The process in which the stream lives: `python -m freqid.capture.sound.stream_process`.

It reads one order (a line of JSON), answers with the devices or with what it is ready for, waits for the word to go,
and then hands on every block as it comes, with a heartbeat ten times a second, until all is sent. Told to stop, or
left alone (its standard input ends), it ramps to the bias and ends. Where the sound system has failed it leaves
without closing the stream, which could hang.
"""

from __future__ import annotations

import contextlib
import gc
import json
import os
import queue
import signal
import sys
import threading
import time
from typing import Any

import numpy as np

from freqid.capture.sound.device_choice import ChannelMap, choose_device, stream_request
from freqid.capture.sound.guard import AngleGuard, GuardLimits, LoopbackGuard
from freqid.capture.sound.interface import OpenStream, SoundDevice, SoundInterface, StreamRequest
from freqid.capture.sound.messages import BLOCK, TEXT, Block, pack_block, write_message
from freqid.capture.sound.playback import Playback, PlaybackPlan
from freqid.capture.sound.transfer import Transfer, planted_fault
from freqid.errors import FreqidError

__all__ = ["main"]

HAND_ON_EVERY = 0.05  # s
BEAT_EVERY = 0.1  # s
FIRST_DATA, NEXT_DATA = 3.0, 1.0  # s without a block after which the sound system has failed
CLOSING = 1.0  # s
PRECEDENCE = 15  # steps of niceness
SIMULATED_HOST = "software"
SWITCHING = 5e-4  # s until the stream's own thread gets its turn
MOST_JOINED = 512  # blocks in one message
Words = queue.Queue["dict[str, Any] | None"]


def main() -> int:
    """Serve one order; the exit status is 0 unless something unforeseen happened."""
    outlet = _own_outlet()
    words: Words = queue.Queue()
    threading.Thread(target=_listen, args=(words,), daemon=True).start()
    for name in ("SIGINT", "SIGHUP", "SIGBREAK"):
        if hasattr(signal, name):
            signal.signal(getattr(signal, name), signal.SIG_IGN)  # the recording process decides
    try:
        order = words.get()
        if order is not None:
            _serve(order, words, outlet)
        status = 0
    except FreqidError as error:
        status = _tell_fault(outlet, str(error))
    except Exception as error:
        status = _tell_fault(outlet, f"fault in the stream: {type(error).__name__}: {error}") or 1
    with contextlib.suppress(OSError):
        sys.stderr.flush()
    os._exit(status)  # a failed sound system can hold up an orderly end for ever


def open_interface(order: dict[str, Any]) -> SoundInterface:
    """The interface the order names."""
    if (plant := order.get("simulated")) is not None:
        from freqid.capture.sound.simulated_interface import SimulatedInterface, SimulatedPlant

        return SimulatedInterface(SimulatedPlant.from_json(plant))
    from freqid.capture.sound.portaudio import PortAudio

    return PortAudio()


def _serve(order: dict[str, Any], words: Words, outlet: int) -> None:
    interface = open_interface(order)
    devices = interface.ask()
    if order["what"] == "ask":
        write_message(outlet, TEXT, {"devices": [device.as_json() for device in devices]})
        return
    request, channels = _request(order, devices)
    interface.check(request)
    write_message(outlet, TEXT, _ready(request, channels))
    word = words.get()
    if word is not None and (plan := word.get("play")) is not None:
        _play(interface, request, channels, plan, words, outlet)


def _request(order: dict[str, Any], devices: tuple[SoundDevice, ...]) -> tuple[StreamRequest, ChannelMap]:
    separate = order.get("input_device")
    output = choose_device(devices, order.get("device"), needs="both" if separate is None else "out")
    input = output if separate is None else choose_device(devices, separate, needs="in")
    channels = ChannelMap.chosen(
        input.input_channels, drive=order["drive"], loopback=order["loopback"], angle=order["angle"]
    )
    return stream_request((output, input), channels=channels, sample_rate=order["sample_rate"]), channels


def _ready(request: StreamRequest, channels: ChannelMap) -> dict[str, Any]:
    return {
        "ready": {
            "output": request.output.as_json(),
            "input": request.input.as_json(),
            "channels": {"drive": channels.drive, "loopback": channels.loopback, "angle": channels.angle},
        },
        "pid": os.getpid(),
    }


def _play(
    interface: SoundInterface, request: StreamRequest, channels: ChannelMap, plan: dict[str, Any], words: Words,
    outlet: int,
) -> None:  # fmt: skip
    playback_plan = PlaybackPlan(**plan["playback"])
    limits = GuardLimits.from_json(plan["guard"])
    samples = np.memmap(plan["drive_file"], dtype="<f4", mode="r", shape=(playback_plan.n_samples,))
    fault = planted_fault()
    transfer = Transfer(
        Playback(samples, playback_plan),
        AngleGuard(limits),
        drive=channels.drive - 1,
        inputs=(None if channels.loopback is None else channels.loopback - 1, channels.angle - 1),
        fault_frame=-1 if fault is None else limits.pre_roll_frames + limits.frames(fault.at),
    )
    if hasattr(signal, "SIGTERM"):
        signal.signal(signal.SIGTERM, lambda *_: transfer.stop("the stream process was told to end"))
    gc.collect()
    gc.disable()  # no pause while the rig moves
    sys.setswitchinterval(SWITCHING)
    if request.output.host != SIMULATED_HOST:
        _take_precedence()
    stream = interface.run(request, transfer)
    watch = LoopbackGuard(limits) if channels.loopback is not None and plan["watch_loopback"] else None
    failed = _hand_on(transfer, limits, watch, words, outlet)
    with contextlib.suppress(OSError):
        write_message(outlet, TEXT, {"end": transfer.reason, "failed": failed, "frames": transfer.position})
    if not failed:
        _close(stream)


def _hand_on(
    transfer: Transfer, limits: GuardLimits, watch: LoopbackGuard | None, words: Words, outlet: int
) -> bool:
    """Hand on blocks and heartbeats until the end; whether the sound system failed."""
    started = beaten = time.monotonic()
    alone = False
    while True:
        if not transfer.blocks:
            time.sleep(HAND_ON_EVERY)
        now = time.monotonic()
        if _told_to_stop(words, alone):
            transfer.stop("stopped")
        finished = transfer.finished  # before the queue is emptied: the last blocks are in it then
        block = _joined(transfer)
        if block is not None:
            if watch is not None and (reason := _watched(watch, limits, block)) is not None:
                transfer.stop(reason)
            alone = not _written(transfer, outlet, BLOCK, pack_block(block), alone=alone)
        if now - beaten >= BEAT_EVERY:
            beaten = now
            alone = not _written(transfer, outlet, TEXT, _beat(transfer, watch), alone=alone)
        if alone:
            transfer.stop("the recording process is gone")
        if finished:
            return False
        silent = now - (transfer.called_at or started)
        if silent > (NEXT_DATA if transfer.called_at else FIRST_DATA):
            transfer.reason = _with_failure(transfer.reason)
            return True


def _with_failure(reason: str | None) -> str:
    failure = "the sound interface stopped delivering data; check its connection and the sound server"
    return f"{reason}, then {failure}" if reason else failure


def _told_to_stop(words: Words, alone: bool) -> bool:
    if alone:
        return False
    try:
        words.get_nowait()  # {"stop": true}, or None where the pipe has ended
    except queue.Empty:
        return False
    return True


def _watched(watch: LoopbackGuard, limits: GuardLimits, block: Block) -> str | None:
    """Look at the frames of the profile and later; the pre-roll may have losses."""
    begin = max(0, limits.pre_roll_frames - block.first_frame)
    if begin >= len(block.frames):
        return None
    return watch.look(block.frames[begin:, 0], block.frames[begin:, 1])


def _joined(transfer: Transfer) -> Block | None:
    """The blocks that wait, as one; frames lost before a block are told with it, so it begins another one."""
    waiting: list[Block] = []
    while transfer.blocks and not (waiting and transfer.blocks[0].flags):
        waiting.append(transfer.blocks.popleft())
        transfer.taken(waiting[-1])
        if len(waiting) >= MOST_JOINED:
            break
    if not waiting:
        return None
    first = waiting[0]
    frames = np.concatenate([block.frames for block in waiting])
    return Block(first_frame=first.first_frame, flags=first.flags, frames=frames)


def _beat(transfer: Transfer, watch: LoopbackGuard | None) -> dict[str, Any]:
    guard = transfer.angle_guard
    beat = {
        "beat": transfer.position,
        "peak": transfer.peak,
        "angle": guard.latest,
        "largest_angle": guard.largest,
        "flagged": transfer.flagged,
        "clipped": guard.clipped + (watch.clipped if watch else 0),
    }
    transfer.peak = 0.0
    return beat


def _written(transfer: Transfer, outlet: int, kind: bytes, content: Any, *, alone: bool) -> bool:
    """Whether somebody reads."""
    if alone:
        return False
    transfer.writing_since = time.monotonic()
    try:
        write_message(outlet, kind, content)
    except OSError:
        return False
    finally:
        transfer.writing_since = None
    return True


def _take_precedence() -> None:
    """Ask for more than the usual share of the processor, where the system lets this user have it."""
    if hasattr(os, "nice"):
        with contextlib.suppress(OSError):
            os.nice(-PRECEDENCE)


def _close(stream: OpenStream) -> None:
    closing = threading.Thread(target=stream.close, daemon=True)
    closing.start()
    closing.join(CLOSING)


def _listen(words: Words) -> None:
    for line in sys.stdin:
        words.put(json.loads(line))
    words.put(None)


def _own_outlet() -> int:
    """A descriptor for our messages alone: what a library prints on standard output goes to standard error."""
    outlet = os.dup(1)
    os.dup2(2, 1)
    if sys.platform == "win32":
        import msvcrt

        msvcrt.setmode(outlet, os.O_BINARY)
    return outlet


def _tell_fault(outlet: int, message: str) -> int:
    with contextlib.suppress(OSError):
        write_message(outlet, TEXT, {"fault": message})
    return 0


if __name__ == "__main__":
    sys.exit(main())
