"""How errors and the login form look: one JSON shape for scripts, a small page for browsers."""

import html
import logging
from urllib.parse import unquote

from starlette.exceptions import HTTPException
from starlette.requests import Request
from starlette.responses import HTMLResponse, JSONResponse, Response

from app.assets import asset_url, shelf
from app.errors import NotFoundError, RequestError, SoftmodeError
from app.keys import nearest_name

logger = logging.getLogger(__name__)

STYLESHEET = "softmode.css"
PAGES = ("sweep", "point", "cutoff")

_PAGE = """<!doctype html>
<html lang="en">
<head>
<meta charset="utf-8">
<meta name="viewport" content="width=device-width, initial-scale=1">
<title>{title} – Softmode</title>
{style}</head>
<body class="plain">
<main>
<h1>{title}</h1>
{content}
</main>
</body>
</html>
"""


def wants_page(request: Request) -> bool:
    """Say whether an answer goes to somebody who reads pages rather than to a script."""
    path = request.scope["path"]
    if path.startswith(("/api/", "/assets/")) or path == "/health":
        return False
    return "text/html" in request.headers.get("accept", "")


def plain_page(title: str, content: str, status: int) -> HTMLResponse:
    """Return a page made of a heading and content that is HTML already."""
    known = STYLESHEET in shelf().files
    style = f'<link rel="stylesheet" href="{asset_url(STYLESHEET)}">\n' if known else ""
    return HTMLResponse(_PAGE.format(title=html.escape(title), style=style, content=content), status)


def error_response(request: Request, error: SoftmodeError) -> Response:
    """Return an error as the one JSON shape, or as a page for browsers."""
    body = error.body()
    answer: Response
    if wants_page(request):
        facts = body["error"]
        lines = [f"<p>{html.escape(error.message)}</p>"]
        named = [(name, facts[name]) for name in ("field", "value", "allowed") if facts[name] is not None]
        if named:
            entries = "".join(f"<dt>{name}</dt><dd>{html.escape(str(value))}</dd>" for name, value in named)
            lines.append(f"<dl>{entries}</dl>")
        answer = plain_page(_title(error.status), "\n".join(lines), error.status)
    else:
        answer = JSONResponse(body, error.status)
    if error.retry_after is not None:
        answer.headers["Retry-After"] = str(error.retry_after)
    if error.status == 408:
        answer.headers["Connection"] = "close"
    return answer


def _title(status: int) -> str:
    if status in {401, 403, 421, 429}:
        return "Not allowed"
    if status == 404:
        return "Nothing here"
    return "Cannot do this now" if status >= 500 else "This cannot be asked"


def login_page(return_to: str, message: str, status: int) -> HTMLResponse:
    """Return the login form; it keeps the address the visitor wanted."""
    note = f'<p role="alert">{html.escape(message)}</p>' if message else ""
    target = html.escape(return_to, quote=True)
    form = (
        f'{note}<form method="post" action="login">'
        f'<input type="hidden" name="next" value="{target}">'
        '<label>Key <input type="password" name="key" autocomplete="current-password" required autofocus>'
        "</label> "
        "<button>Enter</button></form>"
    )
    return plain_page("Shared key", form, status)


async def on_error(request: Request, error: Exception) -> Response:
    """Answer an error of ours, or one of the framework's, in the one shape."""
    if isinstance(error, SoftmodeError):
        return error_response(request, error)
    if isinstance(error, HTTPException):
        return error_response(request, _translated(request, error))
    raise error


def _translated(request: Request, error: HTTPException) -> SoftmodeError:
    path = unquote(request.scope["path"])
    if error.status_code == 404:
        hint = nearest_name(path.strip("/"), PAGES)
        return NotFoundError(
            "no-such-page",
            f"there is nothing at {path[:100]}{hint}",
            "path",
            path,
            "/sweep, /point, /cutoff, /api/…",
        )
    if error.status_code == 405:
        allowed = (error.headers or {}).get("Allow")
        return RequestError(
            "wrong-method",
            f"{path[:100]} does not take {request.method}",
            "method",
            request.method,
            allowed,
            status=405,
        )
    return RequestError("bad-request", str(error.detail), status=error.status_code)
