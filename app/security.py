"""Who may ask what: hosts, foreign sites, the shared key, sizes, and the headers of every answer."""

import asyncio
import hashlib
import hmac
import ipaddress
import logging
import math
import re
import socket
import time
from collections import OrderedDict, deque
from http.cookies import CookieError, SimpleCookie
from urllib.parse import parse_qsl, quote

from starlette.datastructures import MutableHeaders
from starlette.requests import Request
from starlette.responses import RedirectResponse, Response
from starlette.types import ASGIApp, Message, Receive, Scope, Send

from app import links
from app.errors import RefusedError, RequestError, SoftmodeError
from app.faults import error_response, login_page, wants_page
from app.settings import Settings, is_loopback

logger = logging.getLogger(__name__)

COOKIE = "softmode"
SESSION_SECONDS = 30 * 24 * 3600
MOST_GUESSES = 10
GUESS_SECONDS = 60.0
MOST_ADDRESSES = 10_000
LARGEST_HEADERS = 32 * 1024
SAFE_METHODS = frozenset({"GET", "HEAD", "OPTIONS"})
OPEN_PATHS = frozenset({"/login", "/health"})

# Plotly writes style attributes; nothing else is written inline, and nothing comes from elsewhere
POLICY = (
    "default-src 'none'; script-src 'self'; style-src 'self'; style-src-attr 'unsafe-inline'; "
    "img-src 'self' data: blob:; font-src 'self'; connect-src 'self'; manifest-src 'self'; "
    "form-action 'self'; base-uri 'none'; frame-ancestors 'none'"
)

HEADERS = {
    "Content-Security-Policy": POLICY,
    "X-Content-Type-Options": "nosniff",
    "X-Frame-Options": "DENY",
    "Referrer-Policy": "same-origin",
    "Cross-Origin-Opener-Policy": "same-origin",
    "Cross-Origin-Resource-Policy": "same-origin",
    "Permissions-Policy": "camera=(), geolocation=(), microphone=(), payment=(), usb=()",
}


class Guard:
    """Wraps the whole application: refuses what is not allowed, adds headers, answers what went wrong."""

    def __init__(self, app: ASGIApp, settings: Settings) -> None:
        self.app = app
        self.settings = settings
        self.names = {"localhost", "127.0.0.1", "::1", settings.host.strip("[]").lower()}
        self.names |= {name.lower() for name in settings.allowed_hosts}
        self.reachable = not is_loopback(settings.host)
        self.guesses = Guesses()
        if self.reachable:
            own = socket.gethostname().lower()
            self.names |= {own, f"{own}.local"}

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        """Handle one connection."""
        if scope["type"] != "http":
            if scope["type"] == "lifespan":
                await self.app(scope, receive, send)
            return
        request = Request(scope, receive)
        started = False

        async def guarded_send(message: Message) -> None:
            nonlocal started
            if message["type"] == "http.response.start":
                started = True
                headers = MutableHeaders(scope=message)
                for name, value in HEADERS.items():
                    headers.setdefault(name, value)
                headers.setdefault("Cache-Control", "no-cache")
            await send(message)

        try:
            answer = await self._answer(request)
            if answer is not None:
                await answer(scope, receive, guarded_send)
                return
            await self.app(scope, self._limited(request, receive), guarded_send)
        except SoftmodeError as error:
            await error_response(request, error)(scope, receive, guarded_send)
        except Exception:
            logger.exception("%s %s failed", request.method, scope["path"])
            if started:
                raise
            unknown = SoftmodeError("internal", "something went wrong on the server; its log says what")
            await error_response(request, unknown)(scope, receive, guarded_send)

    async def _answer(self, request: Request) -> Response | None:
        """Check a request; return an answer when it goes no further."""
        scope = request.scope
        redirect = self._strip_prefix(scope)
        self._check_host(request)
        if redirect is not None:
            return redirect
        links.check_length(scope["query_string"].decode("latin-1"), self.settings.query_characters)
        if request.method not in SAFE_METHODS:
            self._check_origin(request)
        self._check_size(request)
        if self.settings.key is None:
            return None
        if scope["path"] == "/login":
            return await self._login(request)
        if scope["path"] in OPEN_PATHS or scope["path"].startswith("/assets/") or self._is_known(request):
            return None
        if request.method == "GET" and wants_page(request):
            target = scope["path"].lstrip("/")
            query = scope["query_string"].decode("latin-1")
            wanted = f"{target}?{query}" if query else target
            # relative, so that it works below any prefix
            up = "../" * target.count("/")
            return RedirectResponse(f"{up}login?next={quote(wanted, safe='')}", 303)
        raise RefusedError(
            "key-needed",
            "this server asks for its shared key: log in at /login, or send 'Authorization: Bearer KEY'",
            "Authorization",
            None,
            "Bearer KEY",
            status=401,
        )

    def _strip_prefix(self, scope: Scope) -> Response | None:
        prefix = self.settings.prefix
        if prefix and scope["path"] == prefix:
            return RedirectResponse(f"{prefix}/", 307)
        if prefix and scope["path"].startswith(prefix + "/"):
            scope["path"] = scope["path"].removeprefix(prefix)
            scope["raw_path"] = scope["path"].encode()
        return None

    def _check_host(self, request: Request) -> None:
        host = request.headers.get("host", "")
        name = re.sub(r":\d+$", "", host).strip("[]").lower()
        if name in self.names or (self.reachable and _is_address(name)):
            return
        raise RefusedError(
            "unknown-host",
            "this server is not known under this name; start it with --allow-host NAME to allow it",
            "Host",
            host,
            ", ".join(sorted(self.names)),
            status=421,
        )

    def _check_origin(self, request: Request) -> None:
        """Refuse writes that another site's page has sent."""
        site = request.headers.get("sec-fetch-site")
        origin = request.headers.get("origin")
        if site is not None:
            fine = site in {"same-origin", "none"}
        elif origin is not None:
            fine = origin.partition("://")[2] == request.headers.get("host", "")
        else:
            fine = True  # no browser of the last years leaves out both: a script
        if not fine:
            raise RefusedError(
                "foreign-site",
                "another site's page may not write here",
                "Origin",
                origin or site,
                "this site's own",
            )

    def _check_size(self, request: Request) -> None:
        headers = sum(len(name) + len(value) for name, value in request.scope["headers"])
        if headers > LARGEST_HEADERS:
            raise RequestError(
                "headers-too-large",
                "the headers are too large; clear this site's cookies if a browser sent them",
                "headers",
                headers,
                f"at most {LARGEST_HEADERS} bytes",
                status=431,
            )
        text = request.headers.get("content-length", "0")
        if not text.isdigit():
            raise RequestError(
                "bad-length", "the length of the body is not a number", "Content-Length", text, "digits"
            )
        if int(text[:20]) > self.settings.body_bytes:
            raise self._too_large(int(text[:20]))

    def _too_large(self, size: int) -> RequestError:
        return RequestError(
            "body-too-large",
            f"the body is too large; at most {self.settings.body_bytes} bytes are read",
            "body",
            size,
            f"at most {self.settings.body_bytes} bytes",
            status=413,
        )

    def _limited(self, request: Request, receive: Receive) -> Receive:
        """Return a receiver that refuses bodies longer than they said, or long in coming."""
        if request.method in SAFE_METHODS:
            return receive
        size, complete = 0, False
        deadline = asyncio.get_running_loop().time() + self.settings.patience_seconds

        async def limited() -> Message:
            nonlocal size, complete
            if complete:  # what comes now is the end of the connection
                return await receive()
            try:
                async with asyncio.timeout_at(deadline):
                    message = await receive()
            except TimeoutError:
                raise RequestError(
                    "request-too-slow",
                    f"the body was not there within {self.settings.patience_seconds:g} s",
                    "body",
                    size,
                    status=408,
                ) from None
            complete = not message.get("more_body", False)
            size += len(message.get("body", b""))
            if size > self.settings.body_bytes:
                raise self._too_large(size)
            return message

        return limited

    # -- the shared key -------------------------------------------------------------------------

    def _is_known(self, request: Request) -> bool:
        scheme, _, word = request.headers.get("authorization", "").partition(" ")
        if scheme.lower() == "bearer" and word.strip():
            return self._is_right(request, word.strip())
        try:
            cookie = SimpleCookie(request.headers.get("cookie", "")).get(COOKIE)
        except CookieError:
            return False
        return cookie is not None and self._is_session(cookie.value)

    def _is_key(self, word: str) -> bool:
        return hmac.compare_digest(word.encode(), (self.settings.key or "").encode())

    def _is_right(self, request: Request, word: str) -> bool:
        """Say whether a word is the key; raise RefusedError when there were too many guesses before."""
        client = request.client.host if request.client else ""
        wait = self.guesses.wait(client)
        if wait > 0.0:
            raise RefusedError(
                "too-many-guesses",
                "too many wrong keys came from your address; wait, then try again",
                "key",
                None,
                f"{MOST_GUESSES} in {GUESS_SECONDS:g} s",
                status=429,
                retry_after=math.ceil(wait),
            )
        right = self._is_key(word)
        if not right:
            self.guesses.note(client)
        return right

    def _is_session(self, value: str) -> bool:
        expires, _, mark = value.partition(".")
        if not re.fullmatch(r"\d{1,12}", expires) or int(expires) < time.time():
            return False
        return hmac.compare_digest(mark.encode(), self._mark(expires).encode())

    def _mark(self, expires: str) -> str:
        key = (self.settings.key or "").encode()
        return hmac.new(key, f"softmode session {expires}".encode(), hashlib.sha256).hexdigest()

    async def _login(self, request: Request) -> Response:
        if request.method == "GET":
            pairs = dict(parse_qsl(request.scope["query_string"].decode("latin-1")))
            return login_page(safe_return(pairs.get("next", "")), "", 200)
        if request.method != "POST":
            raise RequestError(
                "wrong-method", "/login takes GET and POST", "method", request.method, status=405
            )
        limited = Request(request.scope, self._limited(request, request.receive))
        fields = dict(parse_qsl((await limited.body()).decode("utf-8", "replace")))
        target = safe_return(fields.get("next", ""))
        try:
            right = self._is_right(request, fields.get("key", ""))
        except RefusedError as error:
            page = login_page(target, error.message, error.status)
            page.headers["Retry-After"] = str(error.retry_after)
            return page
        if not right:
            return login_page(target, "This is not the key.", 401)
        expires = str(int(time.time()) + SESSION_SECONDS)
        answer = RedirectResponse(target or "./", 303)
        secure = request.url.scheme == "https"
        answer.set_cookie(
            COOKIE,
            f"{expires}.{self._mark(expires)}",
            max_age=SESSION_SECONDS,
            path=f"{self.settings.prefix}/",
            secure=secure,
            httponly=True,
            samesite="lax",
        )
        return answer


class Guesses:
    """Wrong keys by address, as many as are remembered; time is monotonic."""

    def __init__(self) -> None:
        self._times: OrderedDict[str, deque[float]] = OrderedDict()

    def note(self, client: str) -> None:
        """Note a wrong key."""
        name = _network(client)
        self._times.setdefault(name, deque(maxlen=MOST_GUESSES)).append(time.monotonic())
        self._times.move_to_end(name)
        while len(self._times) > MOST_ADDRESSES:
            self._times.popitem(last=False)

    def wait(self, client: str) -> float:
        """Return the seconds until this address may guess again."""
        times = self._times.get(_network(client))
        if times is None or len(times) < MOST_GUESSES:
            return 0.0
        return times[0] + GUESS_SECONDS - time.monotonic()


def _network(client: str) -> str:
    """Return what one guesser has of addresses: an IPv4 address, or an IPv6 network of 64 bits."""
    try:
        return str(ipaddress.IPv6Network(f"{client.partition('%')[0]}/64", strict=False))
    except ValueError:
        return client


def safe_return(target: str) -> str:
    """Return an address of this server to go back to after login, or nothing when it is not one."""
    path, mark, query = target.partition("?")
    if not re.fullmatch(r"[a-z]{0,20}", path) or re.search(r"[\x00-\x20\\]", query):
        return ""
    return f"{path or './'}{mark}{query}"


def _is_address(name: str) -> bool:
    try:
        ipaddress.ip_address(name)
    except ValueError:
        return False
    return True
