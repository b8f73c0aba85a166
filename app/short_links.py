"""Short links: names that stand for queries too long to be passed around."""

from starlette.requests import Request
from starlette.types import ASGIApp, Receive, Scope, Send

from app import links
from app.engine import Engine
from app.errors import NotFoundError, SoftmodeError
from app.faults import error_response


class StoredLinks:
    """Puts the long query in the place of the short link that stands for it."""

    def __init__(self, app: ASGIApp, engine: Engine) -> None:
        self.app = app
        self.engine = engine

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        """Handle one request."""
        query = scope.get("query_string", b"").decode("latin-1")
        if links.STORED_KEY in query:
            try:
                scope["query_string"] = (await self._expanded(query)).encode("latin-1")
            except SoftmodeError as error:
                await error_response(Request(scope), error)(scope, receive, send)
                return
        await self.app(scope, receive, send)

    async def _expanded(self, query: str) -> str:
        found = links.stored_name(query)
        if found is None:
            return query
        name, rest = found
        stored = await self.engine.store.link(name)
        if stored is None:
            raise NotFoundError(
                "unknown-link", "this server has made no such short link", links.STORED_KEY, name, None
            )
        return f"{stored}&{rest}" if rest else stored
