"""Command line: thin, every verb one function."""

import argparse
import logging
import os
import signal
import sys
from collections.abc import Sequence
from pathlib import Path

from monitord import __version__
from monitord.errors import ConfigError, MonitordError

# The chain's matrices are small: a second BLAS thread would only wait for them, and burn time waiting.
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

DONE, FAILED, USAGE, CONFIG = 0, 1, 2, 78


def run(arguments: argparse.Namespace) -> int:
    """The daemon; without settings, on the built-in station."""
    from monitord.service import Service
    from monitord.settings import built_in, load

    settings = load(arguments.settings) if arguments.settings else built_in()
    Service(settings).run()
    return DONE


def check(arguments: argparse.Namespace) -> int:
    """Tell every problem of a settings file at once."""
    from monitord.settings import load

    settings = load(arguments.settings)
    count = len(settings.channels)
    print(f"{arguments.settings}: good: {count} channel{'' if count == 1 else 's'}")  # noqa: T201 - the answer
    return DONE


def replay(arguments: argparse.Namespace) -> int:
    """The chain over recordings."""
    from monitord.measure.quasipeak import QuasiPeakMeter
    from monitord.replay import Replay, channels_named, writer_for

    signal.signal(signal.SIGTERM, signal.default_int_handler)  # stopped either way, the summary is written
    channels = channels_named(arguments.settings, arguments.recording[0])
    more_meters = (QuasiPeakMeter,) if arguments.quasi_peak else ()
    writer = writer_for(arguments.format, channels, sys.stdout, more_meters)
    good = Replay(writer, arguments.settings, arguments.every, more_meters).run(arguments.recording)
    sys.stdout.flush()
    return DONE if good else FAILED


def _seconds(text: str) -> float:
    value = float(text)
    if not 0.1 <= value <= 3600:
        raise argparse.ArgumentTypeError(f"{text}: must be 0.1 to 3600 seconds")
    return value


def parser() -> argparse.ArgumentParser:
    """The command line's grammar."""
    top = argparse.ArgumentParser(prog="monitord", description="Monitor for AM transmissions.")
    top.add_argument("--version", action="version", version=f"monitord {__version__}")
    verbs = top.add_subparsers(dest="verb", required=True, metavar="COMMAND")

    verb = verbs.add_parser("run", help="the daemon; without settings: a built-in simulated station")
    verb.add_argument("settings", nargs="?", type=Path, metavar="SETTINGS.toml")
    verb.set_defaults(do=run)

    verb = verbs.add_parser("check", help="every problem of a settings file at once")
    verb.add_argument("settings", type=Path, metavar="SETTINGS.toml")
    verb.set_defaults(do=check)

    verb = verbs.add_parser("replay", help="the same chain over recordings, as fast as it goes")
    verb.add_argument("recording", nargs="+", metavar="RECORDING", help="SigMF, WAV, RF64 or FLAC")
    verb.add_argument("--settings", type=Path, metavar="S.toml", help="channels to measure")
    verb.add_argument("--every", type=_seconds, default=1.0, metavar="SECONDS", help="interval of a reading")
    verb.add_argument("--format", choices=("json", "table", "csv"), default="table")
    verb.add_argument(
        "--quasi-peak", action="store_true", help="also the quasi-peak noise of the pauses (ITU-R BS.468-4)"
    )
    verb.set_defaults(do=replay)
    return top


def main(words: Sequence[str] | None = None) -> int:
    """Run a command; the exit code follows sysexits where it says more than failed."""
    arguments = parser().parse_args(words)
    logging.basicConfig(level=logging.INFO, format="monitord: %(message)s", stream=sys.stderr)
    try:
        return int(arguments.do(arguments))
    except ConfigError as error:
        for problem in error.problems:
            print(f"monitord: {problem}", file=sys.stderr)  # noqa: T201 - the way to the user
        return CONFIG
    except MonitordError as error:
        print(f"monitord: {error}", file=sys.stderr)  # noqa: T201 - the way to the user
        return FAILED
    except BrokenPipeError:
        # Whoever read the output has seen enough; keep the interpreter from flushing into the closed pipe.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return FAILED
    except KeyboardInterrupt:
        return FAILED


if __name__ == "__main__":
    sys.exit(main())
