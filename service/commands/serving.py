"""`serve`, `work`, `token`: running the service and letting people in."""

from __future__ import annotations

import argparse
import json
import logging
import os
import shlex
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any

from extractor.errors import InputError
from service.commands.common import DONE, Parser, add_command, emit, note, real, rows, whole

SCOPES = {
    "submit": "declare, upload, seal",
    "collect": "fetch the bits",
    "audit": "read documents and seed",
    "admin": "everything",
}
DAY_S = 86_400
SCRIPT_VARIABLES = ("BELLASSAY_PYTHON",)  # read by the scripts in deploy/


def add(commands: Any) -> None:
    parser = add_command(
        commands,
        "serve",
        serve,
        "run the service: HTTP server and workers",
        """Runs the HTTP server and its workers on one data folder, which is made if missing, until it is interrupted.
        The description of the HTTP interface is at /docs of the address it prints. Workers that die are started
        again, and unfinished runs go on where they were. Every setting can also be given as an environment variable
        BELLASSAY_..., as listed in the README.""",
        """
        bellassay serve --data /srv/bellassay --port 8383
        """,
        prints_result=False,
    )
    _add_data(parser)
    parser.add_argument("--host", metavar="HOST", help="address to listen on (default 127.0.0.1, this machine only)")
    parser.add_argument("--port", type=whole, metavar="PORT", help="port to listen on; 0 = any free one (default 8383)")
    parser.add_argument(
        "--workers",
        type=whole,
        metavar="COUNT",
        help="number of worker processes, runs worked on at a time (default 1)",
    )
    parser.add_argument("--no-worker", action="store_true", help="serve only; workers run elsewhere: bellassay work")
    parser.add_argument("--json", action="store_true", help="print the address as one JSON object on standard output")

    parser = add_command(
        commands,
        "work",
        work,
        "run a further worker on a data folder",
        """Runs one more worker on the data folder of a service, until it is interrupted. It takes sealed runs in turn;
        killing it loses nothing, another worker goes on after its lease has run out.""",
        """
        bellassay work --data /srv/bellassay
        """,
        prints_result=False,
    )
    _add_data(parser)
    parser.add_argument("--once", action="store_true", help="work on the runs that wait now, then end")

    groups = commands.add_parser(
        "token",
        help="create, list and revoke access tokens",
        description="Access tokens of a service, made directly on its data folder.",
        epilog="example:\n  bellassay token create anna --scope submit --scope collect",
    )
    actions = groups.add_subparsers(dest="action", metavar="ACTION", required=True, parser_class=Parser)
    parser = add_command(
        actions,
        "create",
        create_token,
        "make a token",
        """Makes an access token and prints it; it is shown once and kept nowhere. Runs belong to the owner, so two
        tokens of one owner see the same runs. Give each person or program only the scopes it needs.""",
        """
        bellassay token create anna --scope submit --scope collect
        """,
    )
    parser.add_argument("owner", metavar="OWNER", help="whose runs the token reaches, 1 to 100 characters")
    parser.add_argument(
        "--scope",
        action="append",
        choices=tuple(SCOPES),
        metavar="SCOPE",
        help="may be repeated. "
        + "; ".join(f"{name}: {text}" for name, text in SCOPES.items())
        + " (default submit, collect, audit)",
    )
    parser.add_argument("--label", default="", metavar="TEXT", help="what the token is for, up to 200 characters")
    parser.add_argument("--days", type=real, metavar="DAYS", help="life of the token in days (default 365)")
    _add_data(parser)
    parser = add_command(
        actions,
        "list",
        list_tokens,
        "list the tokens",
        """Lists the tokens of a data folder with owner, scopes and times; the secrets are not kept and cannot be
        shown.""",
        """
        bellassay token list
        """,
    )
    _add_data(parser)
    parser = add_command(
        actions,
        "revoke",
        revoke_token,
        "make a token useless",
        """Revokes a token at once and for ever. Its id is shown by token list; the id alone gives no access, so it may
        be written down.""",
        """
        bellassay token revoke 3f2a9c0d11e4b7a6
        """,
    )
    parser.add_argument("token_id", metavar="ID", help="id of the token, 16 hexadecimal digits, or the whole token")
    _add_data(parser)


def _add_data(parser: argparse.ArgumentParser) -> None:
    parser.add_argument(
        "--data", metavar="DIR", help="data folder of the service (default: BELLASSAY_DATA, else ./bellassay-data)"
    )


def _settings(args: argparse.Namespace, **more: Any) -> Any:
    from service.settings import ServiceSettings, unknown_variables

    for name in unknown_variables(os.environ):
        if name in SCRIPT_VARIABLES:
            continue
        note(f"caution: {name} names no setting and is ignored")
    return ServiceSettings.load(os.environ, data=args.data, **more)


def serve(args: argparse.Namespace) -> int:
    from service.supervisor import serve as run_service

    if args.no_worker and args.workers:
        raise InputError("--no-worker and --workers contradict each other", code="bad-usage")
    settings = _settings(args, host=args.host, port=args.port, workers=0 if args.no_worker else args.workers)

    def listening(url: str) -> None:
        if args.json:
            print(json.dumps({"url": url, "data": str(settings.data), "workers": settings.workers}), flush=True)
        else:
            print(f"listening on {url}", flush=True)
        workers = f"{settings.workers or 'no'} worker{'' if settings.workers == 1 else 's'}"
        note(f"data in {settings.data.resolve()}, {workers}; stop with Ctrl-C")
        note(f"a token: bellassay token create NAME --data {shlex.quote(str(settings.data))}")

    return run_service(settings, on_listening=listening)


def work(args: argparse.Namespace) -> int:
    from service.jobs.worker import run_worker

    settings = _settings(args)
    logging.basicConfig(level=settings.log_level.upper(), format="%(asctime)s %(levelname)s %(name)s %(message)s")
    if not args.once:
        note(f"working on {settings.data.resolve()}; stop with Ctrl-C")

    done = run_worker(settings, once=args.once)
    if args.once:
        note(f"worked on {done} run{'' if done == 1 else 's'}")
    return DONE


@contextmanager
def _store(settings: Any, *, make: bool = False) -> Iterator[Any]:
    """The store of a data folder, made if missing when `make` says so. Errors raised: InputError if there is none."""
    from service.app import open_store

    if not make and not settings.database_path.exists():
        raise InputError(
            f"no service data in {settings.data}; "
            f"start it with: bellassay serve --data {shlex.quote(str(settings.data))}",
            code="no-service-data",
        )
    store = open_store(settings)
    try:
        yield store
    finally:
        store.close()


def create_token(args: argparse.Namespace) -> int:
    from service.clock import now_s, now_text
    from service.custody.tokens import new_token

    settings = _settings(args)
    days = args.days if args.days is not None else settings.token_days
    if days <= 0:
        raise InputError("must be above 0", code="out-of-range", field="--days")
    scopes = args.scope or ["submit", "collect", "audit"]
    with _store(settings, make=True) as store, store.write() as transaction:
        text, row = new_token(
            transaction,
            owner=args.owner,
            scopes=scopes,
            label=args.label,
            time=now_text(),
            expires_s=now_s() + days * DAY_S,
        )
    emit(args, {"token": text, "data": str(settings.data.resolve())} | _token_document(row), [text])
    note(f"a token for the service data in {settings.data.resolve()}")
    note(f"owner {row.owner}, scopes {', '.join(row.scopes)}, {days:g} days; it is shown only now")
    note("use it as: export BELLASSAY_TOKEN=TOKEN")
    return DONE


def list_tokens(args: argparse.Namespace) -> int:
    with _store(_settings(args)) as store, store.read() as reading:
        found = reading.list_tokens()
    lines: list[str] = []
    for row in found:
        document = _token_document(row)
        state = f"revoked {row.revoked}" if row.revoked else f"until {document['expires'] or 'revoked'}"
        lines += rows(
            [
                (
                    row.id,
                    f"{row.owner}, {', '.join(row.scopes)}, made {row.created}, {state}"
                    + (f", {row.label}" if row.label else ""),
                )
            ]
        )
    emit(args, {"tokens": [_token_document(row) for row in found]}, lines or ["no tokens yet"])
    return DONE


def revoke_token(args: argparse.Namespace) -> int:
    from service.clock import now_text

    token_id = args.token_id.split("_")[1] if args.token_id.count("_") == 2 else args.token_id
    with _store(_settings(args)) as store, store.write() as transaction:
        known = transaction.get_token(token_id)
        if known is None:
            raise InputError("there is no token with this id (bellassay token list)", code="no-token")
        revoked = transaction.revoke_token(token_id, now_text())
    emit(
        args,
        {"id": token_id, "revoked": True, "before": not revoked},
        ["revoked" if revoked else "had been revoked before"],
    )
    return DONE


def _token_document(row: Any) -> dict[str, Any]:
    """A token without its secret."""
    from datetime import UTC, datetime

    expires = (
        None if row.expires_s is None else datetime.fromtimestamp(row.expires_s, UTC).strftime("%Y-%m-%dT%H:%M:%SZ")
    )
    return {
        "id": row.id,
        "owner": row.owner,
        "scopes": list(row.scopes),
        "label": row.label,
        "created": row.created,
        "expires": expires,
        "revoked": row.revoked,
        "last_used": row.last_used,
    }
