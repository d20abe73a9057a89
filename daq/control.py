"""The control channel: HTTP on loopback and on a Unix socket, closed to everything but our own command line.

The rules (each has a forged request in the tests): loopback and a port of the system's choosing; a new
token at each start, compared in constant time; the Host header exactly ours; any Origin header refused;
POST only as application/json with a Content-Length and a bounded body; bounded concurrency; every
answer carries protocol, build, schema and instance; who asks is taken from the Unix socket's peer where
there is one.
"""

from __future__ import annotations

import contextlib
import hmac
import logging
import socket
import struct
import threading
from asyncio import Transport
from collections.abc import Callable, Generator, Mapping
from dataclasses import dataclass
from typing import Any

import uvicorn
from pydantic import BaseModel, ValidationError
from starlette.applications import Starlette
from starlette.concurrency import run_in_threadpool
from starlette.requests import Request as HttpRequest
from starlette.responses import JSONResponse
from starlette.routing import Route
from starlette.types import ASGIApp, Receive, Scope, Send
from uvicorn.protocols.http.h11_impl import H11Protocol

from config.errors import RevmarkError

PROTOCOL = (1, 1)
BODY_LIMIT = 64 * 1024
CONCURRENT = 64
KEEP_ALIVE_S = 5

log = logging.getLogger("revmark.control")


@dataclass(frozen=True, slots=True)
class Identity:
    """What each answer says of the daemon."""

    version: str
    schema: str
    instance: str

    def as_dict(self) -> dict[str, Any]:
        return {
            "protocol": list(PROTOCOL),
            "version": self.version,
            "schema": self.schema,
            "instance": self.instance,
        }


@dataclass(frozen=True, slots=True)
class Act:
    """A POST: its path, the model of its body, and what does it."""

    path: str
    body: type[BaseModel]
    do: Callable[[Any, str], Any]
    """Called with the checked body and the name of who asks."""


@dataclass(frozen=True, slots=True)
class Question:
    """A GET: its path, the query parameters it knows, and what answers it."""

    path: str
    parameters: frozenset[str]
    answer: Callable[[Mapping[str, str]], Any]


class Gate:
    """Pure ASGI middleware: refuses what does not come from our own command line."""

    def __init__(
        self, app: ASGIApp, token: str, hosts: Callable[[], frozenset[str]], identity: Identity
    ) -> None:
        self._app = app
        self._token = token
        self._hosts = hosts
        self._identity = identity

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        if scope["type"] != "http":
            return
        refusal = self._refuses(scope)
        if refusal is None:
            await self._app(scope, receive, send)
            return
        status, cause = refusal
        log.warning("refused a request (%d): %s", status, cause)
        await _failure(self._identity, status, cause, "Use the revmark command.")(scope, receive, send)

    def _refuses(self, scope: Scope) -> tuple[int, str] | None:
        headers = _single_headers(scope)
        if headers is None:
            return 400, "A header came twice."
        if headers.get("host", "") not in self._hosts():
            return 421, "The Host header is not this daemon."
        if "origin" in headers:
            return 403, "Requests from web pages are refused."
        given = headers.get("authorization", "")
        if not hmac.compare_digest(given.encode(), f"Bearer {self._token}".encode()):
            return 401, "The token is missing or wrong."
        if scope["method"] == "POST":
            return _refuses_body(headers)
        if "content-length" in headers or "transfer-encoding" in headers:
            return 400, "A question carries no body."
        return None


def _single_headers(scope: Scope) -> dict[str, str] | None:
    """The headers by lower-case name; None when one that matters here stands twice."""
    found: dict[str, str] = {}
    for raw_name, raw_value in scope["headers"]:
        name = raw_name.decode("latin-1").lower()
        if name in found:
            return None
        found[name] = raw_value.decode("latin-1")
    return found


def _refuses_body(headers: Mapping[str, str]) -> tuple[int, str] | None:
    if headers.get("content-type", "").split(";")[0].strip().lower() != "application/json":
        return 415, "The body must be application/json."
    length = headers.get("content-length", "")
    if "transfer-encoding" in headers or not (length.isascii() and length.isdigit()):
        return 411, "The body needs a Content-Length."
    if int(length) > BODY_LIMIT:
        return 413, f"The body is larger than {BODY_LIMIT} bytes."
    return None


def _failure(identity: Identity, status: int, cause: str, remedy: str) -> JSONResponse:
    error = {"cause": cause, "remedy": remedy}
    return JSONResponse({**identity.as_dict(), "error": error}, status)


def _complaints(error: ValidationError) -> str:
    return "; ".join(f"{'.'.join(str(p) for p in e['loc']) or 'body'}: {e['msg']}" for e in error.errors())


def _peer_name(request: HttpRequest) -> str:
    """The user name at the other end of the Unix socket; "" over loopback."""
    uid = request.scope.get("state", {}).get("peer_uid")
    if uid is None:
        return ""
    import pwd

    try:
        return pwd.getpwuid(uid).pw_name
    except KeyError:
        return f"uid {uid}"


async def _answered(identity: Identity, work: Callable[[], Any]) -> JSONResponse:
    try:
        answer = await run_in_threadpool(work)
    except RevmarkError as error:
        return JSONResponse({**identity.as_dict(), "error": error.as_dict()}, 409)
    except Exception:
        log.exception("a request failed")
        return _failure(identity, 500, "The daemon failed at this request.", "Its log says why.")
    return JSONResponse({**identity.as_dict(), "answer": answer})


def _post_route(identity: Identity, act: Act) -> Route:
    async def endpoint(request: HttpRequest) -> JSONResponse:
        if request.query_params:
            return _failure(identity, 400, "An act takes no query.", "Use the revmark command.")
        data = await request.body()
        try:
            body = act.body.model_validate_json(data, strict=False)
        except ValidationError as error:
            return _failure(identity, 422, f"The request is malformed ({_complaints(error)}).", "Mend it.")
        who = _peer_name(request)
        return await _answered(identity, lambda: act.do(body, who))

    return Route(act.path, endpoint, methods=["POST"])


def _get_route(identity: Identity, question: Question) -> Route:
    async def endpoint(request: HttpRequest) -> JSONResponse:
        unknown = set(request.query_params) - question.parameters
        if unknown:
            return _failure(identity, 400, f"Unknown parameter: {', '.join(sorted(unknown))}.", "Mend it.")
        given = {**request.path_params, **request.query_params}
        return await _answered(identity, lambda: question.answer(given))

    return Route(question.path, endpoint, methods=["GET"])


def application(
    identity: Identity,
    token: str,
    hosts: Callable[[], frozenset[str]],
    acts: tuple[Act, ...],
    questions: tuple[Question, ...],
) -> ASGIApp:
    """The control channel as an ASGI application."""
    routes = [_post_route(identity, a) for a in acts] + [_get_route(identity, q) for q in questions]

    async def missing(request: HttpRequest, _: Exception) -> JSONResponse:
        return _failure(identity, 404, f"There is no {request.url.path} here.", "Use the revmark command.")

    async def wrong_verb(_: HttpRequest, __: Exception) -> JSONResponse:
        return _failure(identity, 405, "That path takes another method.", "Use the revmark command.")

    app = Starlette(routes=routes, exception_handlers={404: missing, 405: wrong_verb})
    return Gate(app, token, hosts, identity)


class PeerProtocol(H11Protocol):
    """HTTP/1.1 that remembers the user at the other end of a Unix socket (SO_PEERCRED, Linux)."""

    def connection_made(self, transport: Transport) -> None:  # type: ignore[override]
        link = transport.get_extra_info("socket")
        if (
            link is not None
            and link.family == getattr(socket, "AF_UNIX", None)
            and hasattr(socket, "SO_PEERCRED")
        ):
            packed = link.getsockopt(socket.SOL_SOCKET, socket.SO_PEERCRED, struct.calcsize("3i"))
            self.app_state = {**self.app_state, "peer_uid": struct.unpack("3i", packed)[1]}
        super().connection_made(transport)


class _Server(uvicorn.Server):
    """The main thread owns the signals; the event loop itself gives the heartbeat and watches ``stop``."""

    def __init__(self, config: uvicorn.Config, stop: threading.Event, beat: Callable[[], None]) -> None:
        super().__init__(config)
        self._stop = stop
        self._beat = beat

    @contextlib.contextmanager
    def capture_signals(self) -> Generator[None, None, None]:
        yield

    async def on_tick(self, counter: int) -> bool:
        self._beat()
        return self._stop.is_set() or await super().on_tick(counter)


def serve_control(
    app: ASGIApp, sockets: list[socket.socket], stop: threading.Event, beat: Callable[[], None]
) -> None:
    """The control thread's body: serves ``app`` on ``sockets`` until ``stop`` is set."""
    config = uvicorn.Config(
        app,
        http=PeerProtocol,
        ws="none",
        lifespan="off",
        log_config=None,
        access_log=False,
        limit_concurrency=CONCURRENT,
        timeout_keep_alive=KEEP_ALIVE_S,
        timeout_graceful_shutdown=1,
        server_header=False,
    )
    _Server(config, stop, beat).run(sockets=sockets)


def loopback_socket() -> socket.socket:
    """A listening TCP socket on 127.0.0.1 with a port of the system's choosing."""
    link = socket.socket(socket.AF_INET, socket.SOCK_STREAM)
    if hasattr(socket, "SO_EXCLUSIVEADDRUSE"):
        link.setsockopt(socket.SOL_SOCKET, socket.SO_EXCLUSIVEADDRUSE, 1)
    link.bind(("127.0.0.1", 0))
    link.listen(64)
    return link
