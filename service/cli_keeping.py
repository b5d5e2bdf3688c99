"""Commands about what is kept: `work`, `migrate`, `sweep`, `keys`."""

import argparse
import dataclasses
import os
import sys
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

from service.config import DATA_FOLDER, PREFIX, Config, config_from_environment

if TYPE_CHECKING:
    from service.storage.keys import KeyStore
    from service.work.settings import WorkSettings

SCOPES = ("read", "write", "admin")
USUAL_SCOPES = ("read", "write")


def add_commands(commands: Any) -> None:
    """Add the commands to the subparsers of `loiterwise`."""
    work = commands.add_parser(
        "work", help="reduce kept flights", description="Reduce the flights that wait in the queue, until told to stop."
    )
    work.add_argument("--workers", type=int, metavar="N", help=f"processes ({PREFIX}JOB_WORKERS)")
    work.set_defaults(run=_work)
    migrate = commands.add_parser(
        "migrate",
        help="bring the database up to date",
        description="Create or change the tables as needed.",
    )
    migrate.set_defaults(run=_migrate)
    sweep = commands.add_parser(
        "sweep",
        help="take away what is old or left over",
        description="Delete files that no flight holds, and logs and results past their age.",
    )
    sweep.set_defaults(run=_sweep)
    _add_keys(commands)


def _add_keys(commands: Any) -> None:
    keys = commands.add_parser("keys", help="keys of access", description="Keys of access: add, list, revoke.")
    doing = keys.add_subparsers(required=True, metavar="ACTION")
    add = doing.add_parser("add", help="make a key; it is shown once", description="Make a key; it is shown once.")
    add.add_argument("owner", metavar="OWNER", help="whose flights it opens; others' are not seen")
    add.add_argument("--label", default="-", help="what it is for")
    add.add_argument(
        "--scope", action="append", choices=SCOPES, help=f"may be given again; without: {', '.join(USUAL_SCOPES)}"
    )
    add.set_defaults(run=_add_key)
    listed = doing.add_parser("list", help="the keys, without their secrets", description="The keys without secrets.")
    listed.add_argument("--owner", metavar="OWNER", help="of this owner alone")
    listed.set_defaults(run=_list_keys)
    revoke = doing.add_parser("revoke", help="make a key useless", description="From now on the key opens nothing.")
    revoke.add_argument("key_id", metavar="KEY_ID", help="as `keys list` shows it")
    revoke.set_defaults(run=_revoke_key)


def keeping_environment(environment: Mapping[str, str]) -> dict[str, str]:
    """The environment with a place to keep flights in: `loiterwise-data`, where nothing else is said."""
    wanted = dict(environment)
    if not (wanted.get(f"{PREFIX}DATA", "").strip() or wanted.get(f"{PREFIX}DATABASE_URL", "").strip()):
        wanted[f"{PREFIX}DATA"] = str(Path(DATA_FOLDER).resolve())
    return wanted


def _config() -> Config:
    # these commands need no key: whoever runs them has the data at hand
    return config_from_environment({**keeping_environment(os.environ), f"{PREFIX}ACCESS": "open"})


def _work(given: argparse.Namespace) -> int:
    from service.log_lines import log_to_stderr

    config = _config()
    if given.workers is not None:
        config = dataclasses.replace(config, job_workers=given.workers)
    log_to_stderr(config.log_level)
    return run_workers(config)


def run_workers(config: Config, beside: Sequence[str] | None = None) -> int:
    """Workers until told to stop, and a server `beside` them; its exit code."""
    from service.keeping import migrate
    from service.work.supervise import supervise

    migrate(config)
    return supervise(work_settings(config), beside=beside)


def work_settings(config: Config) -> "WorkSettings":
    """What the workers need to know of the configuration."""
    from service.keeping import database_of, store_of
    from service.work.settings import WorkSettings

    return WorkSettings(
        database=database_of(config),
        store=store_of(config),
        spool=str(config.spool),
        workers=config.job_workers,
        job_seconds=config.job_seconds,
        job_memory_bytes=config.job_memory_bytes,
        job_attempts=config.job_attempts,
        log_days=config.log_days,
        result_days=config.result_days,
        log_level=config.log_level,
    )


def _migrate(_given: argparse.Namespace) -> int:
    from service.keeping import migrate

    migrate(_config())
    print("the database is up to date", file=sys.stderr)
    return 0


def _sweep(_given: argparse.Namespace) -> int:
    from service.keeping import migrate
    from service.work.sweep import sweep

    config = _config()
    migrate(config)
    print(sweep(work_settings(config)), file=sys.stderr)
    return 0


def _add_key(given: argparse.Namespace) -> int:
    from service.domain.kept import Scope

    record, plain = _keys().add(given.owner, given.label, [Scope(name) for name in given.scope or USUAL_SCOPES])
    print(plain)
    print(f"key {record.key_id} of {record.owner}; it is shown this once", file=sys.stderr)
    return 0


def _list_keys(given: argparse.Namespace) -> int:
    for record in _keys().list(given.owner):
        state = f"revoked {record.revoked_utc:%Y-%m-%d}" if record.revoked_utc else "in force"
        scopes = ",".join(sorted(record.scopes))
        print("\t".join((record.key_id, record.owner, scopes, f"{record.created_utc:%Y-%m-%d}", state, record.label)))
    return 0


def _revoke_key(given: argparse.Namespace) -> int:
    record = _keys().revoke(given.key_id)
    print(f"key {record.key_id} of {record.owner} is revoked", file=sys.stderr)
    return 0


def _keys() -> "KeyStore":
    from service.keeping import open_stores

    return open_stores(_config()).keys
