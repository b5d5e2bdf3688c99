"""The console command `loiterwise`: `reduce`, `serve`, and what `cli_keeping.py` adds.

Exit codes of `reduce`: 0 answered (accepted or doubtful), 3 answered but refused, 2 the file or the settings are wrong,
1 a failure of our own.
"""

import argparse
import hashlib
import os
import sys
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, BinaryIO, NoReturn

from schemas.parts import PARTS
from service.cli_keeping import add_commands, keeping_environment, run_workers
from service.config import PREFIX, ConfigurationWrong, config_from_environment, listen_address
from service.domain.errors import LoiterwiseError
from service.log_lines import log_to_stderr
from service.version import SERVICE

if TYPE_CHECKING:
    from tqdm import tqdm

ANSWERED, FAILED, WRONG, REFUSED, INTERRUPTED = 0, 1, 2, 3, 130
PROGRESS_AFTER_S = 1.0
"""A bar for what takes longer than this."""


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the command; returns the exit code."""
    limit_threads(os.environ)
    given = _parser().parse_args(arguments)
    run: Callable[[argparse.Namespace], int] = given.run
    try:
        return run(given)
    except (LoiterwiseError, ConfigurationWrong) as error:
        _say(str(error))
        for pointer, message in getattr(error, "errors", {}).items():
            _say(f"  {pointer or '/'}: {message}")
        return WRONG
    except OSError as error:
        _say(f"{error.filename or 'the file'}: {error.strerror or error}")
        return WRONG
    except KeyboardInterrupt:
        return INTERRUPTED
    except Exception as error:
        if os.environ.get(PREFIX + "LOG_LEVEL", "").upper() == "DEBUG":
            raise
        _say(f"internal failure ({type(error).__name__}); {PREFIX}LOG_LEVEL=DEBUG shows where")
        return FAILED


def limit_threads(environment: "os._Environ[str]") -> None:
    """One thread for linear algebra: matrices are small here, and workers fill the processor. Before numpy loads."""
    for name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"):
        environment.setdefault(name, "1")


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(
        prog="loiterwise", description="A flight in, an airspeed with its true uncertainty out."
    )
    parser.add_argument("--version", action="version", version=f"loiterwise {SERVICE}")
    commands = parser.add_subparsers(required=True, metavar="COMMAND")
    reduce = commands.add_parser(
        "reduce",
        help="reduce one file",
        description="Reduce one file: JSON to standard output, a summary for people to standard error.",
        epilog="exit codes: 0 answered, 3 refused, 2 the file or the settings are wrong, 1 a failure of our own",
    )
    reduce.add_argument("file", metavar="FILE", help="log, CSV or JSON batch, also gzipped; - is standard input")
    reduce.add_argument("--settings", metavar="FILE.json", help="settings; they replace those inside a batch")
    reduce.add_argument(
        "--include", type=_parts, default=frozenset(), metavar="PARTS", help=f"comma-separated: {', '.join(PARTS)}"
    )
    reduce.add_argument("--pretty", action="store_true", help="indent the JSON")
    reduce.set_defaults(run=_reduce)
    serve = commands.add_parser("serve", help="run the production server", description="Run the production server.")
    serve.add_argument("--bind", metavar="HOST[:PORT]", help="where to listen (an open server: loopback only)")
    serve.add_argument("--workers", type=int, help="processes")
    serve.add_argument("--threads", type=int, help="threads per process")
    serve.set_defaults(run=_serve)
    add_commands(commands)
    return parser


def _parts(text: str) -> frozenset[str]:
    named = frozenset(name.strip() for name in text.split(",") if name.strip())
    if unknown := sorted(named - set(PARTS)):
        raise argparse.ArgumentTypeError(f"{unknown[0]!r} is none of {', '.join(PARTS)}")
    return named


def _reduce(given: argparse.Namespace) -> int:
    # loaded here, so that --help and serve do not wait for numpy and scipy
    from schemas.reduction import dump_reduction
    from schemas.wire import decode, encode, indented
    from service.domain.codes import Verdict
    from service.intake import reduce_file
    from service.summary import summary_text

    settings = None if given.settings is None else decode(Path(given.settings).read_bytes())
    with _log_file(given.file) as (path, sha256), _progress_bar() as progress:
        reduction = reduce_file(path, sha256=sha256, settings=settings, progress=progress)
    encoded = encode(dump_reduction(reduction, given.include))
    _write(indented(encoded) if given.pretty else encoded)
    _say_plainly(summary_text(reduction))
    return REFUSED if reduction.calibration.verdict is Verdict.REFUSED else ANSWERED


@contextmanager
def _log_file(name: str) -> Iterator[tuple[Path, str]]:
    """Path and SHA-256 of the log; standard input and gzip go through a temporary file."""
    from service.http.gunzip import GZIP_MAGIC

    if name == "-":
        with _copied(sys.stdin.buffer) as copy:
            yield copy
        return
    with Path(name).open("rb") as file:
        zipped = file.read(len(GZIP_MAGIC)) == GZIP_MAGIC
        file.seek(0)
        if not zipped:
            yield Path(name), hashlib.file_digest(file, "sha256").hexdigest()
            return
        with _copied(file) as copy:
            yield copy


@contextmanager
def _copied(file: BinaryIO) -> Iterator[tuple[Path, str]]:
    """A temporary copy of what `file` holds, without gzip."""
    from service.http.gunzip import CHUNK_BYTES, GZIP_MAGIC, Gunzipped
    from service.http.spool import spooled_file

    config = config_from_environment()
    buffered = _Peeked(file)
    source = Gunzipped(buffered, config.max_decoded_bytes) if buffered.head.startswith(GZIP_MAGIC) else buffered
    with spooled_file(config.spool) as copy:
        while chunk := source.read(CHUNK_BYTES):
            copy.write(chunk)
        copy.finish()
        yield copy.path, copy.sha256


class _Peeked:
    """A stream whose first bytes are known and still to be read."""

    def __init__(self, file: BinaryIO) -> None:
        self._file = file
        self.head = file.read(64)
        self._given = False

    def read(self, size: int) -> bytes:
        if not self._given:
            self._given = True
            if self.head:
                return self.head
        return self._file.read(size)


@contextmanager
def _progress_bar() -> Iterator[Callable[[float], None] | None]:
    """A bar on a terminal once the work takes long; nothing elsewhere."""
    if not sys.stderr.isatty():
        yield None
        return
    from tqdm import tqdm

    layout = "reducing {percentage:3.0f}% |{bar}| {elapsed}"
    with tqdm(total=1.0, bar_format=layout, delay=PROGRESS_AFTER_S, leave=False, file=sys.stderr) as bar:
        yield lambda share: _advance(bar, share)


def _advance(bar: "tqdm[NoReturn]", share: float) -> None:
    bar.update(share - bar.n)


def _serve(given: argparse.Namespace) -> int:
    for name in ("bind", "workers", "threads"):
        if (value := getattr(given, name)) is not None:
            os.environ[f"{PREFIX}{name.upper()}"] = str(value)
    config = config_from_environment(keeping_environment(os.environ))
    listen_address(config)  # says what is wrong before the server starts
    os.environ.update(keeping_environment(os.environ))
    log_to_stderr(config.log_level)
    sys.stdout.flush()
    # the server runs beside the workers of kept flights: one of them ends, all end
    server = [sys.executable, "-m", "gunicorn", "-c", "python:service.server", "service.app:create_app()"]
    return run_workers(config, beside=server)


def _write(encoded: bytes) -> None:
    try:
        sys.stdout.buffer.write(encoded + b"\n")
        sys.stdout.buffer.flush()
    except BrokenPipeError:
        # the reader has seen enough; keep the interpreter from complaining at exit
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())


def _say(text: str) -> None:
    _say_plainly(f"loiterwise: {text}")


def _say_plainly(text: str) -> None:
    print(text, file=sys.stderr)
