"""One route per path that knows all its methods, so that HEAD, OPTIONS and Allow are right everywhere."""

from collections.abc import Awaitable, Callable, Mapping

from starlette.requests import Request
from starlette.responses import Response
from starlette.routing import Route
from starlette.types import Receive, Scope, Send

from service.errors import MethodNotAllowed
from service.query import refuse_unknown

Handler = Callable[[Request], Awaitable[Response]]


class Door:
    """The methods of one path. HEAD is GET without its body; OPTIONS says what there is."""

    def __init__(self, path: str, handlers: Mapping[str, Handler], *, asked: bool, told: Mapping[str, str]) -> None:
        """Open `path`; `told` are header fields that the answer to OPTIONS carries besides Allow.

        With `asked` the handlers take query parameters and check them; else none is known here.
        """
        self._asked = asked
        self.path = path
        self._handlers = dict(handlers)
        if "GET" in self._handlers:
            self._handlers["HEAD"] = self._handlers["GET"]
        self._allowed = sorted({*self._handlers, "OPTIONS"})
        self._told = {"allow": ", ".join(self._allowed), **told}

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        """Answer with the handler of the method."""
        method = scope["method"]
        handler = self._handlers.get(method)
        if handler is None and method != "OPTIONS":
            raise MethodNotAllowed(f"This path takes {', '.join(self._allowed)}.", allowed=self._allowed)
        request = Request(scope, receive)
        if not self._asked:
            refuse_unknown(request.query_params.multi_items(), ("refresh",))
        if handler is None:
            response = Response(status_code=204, headers=self._told)
        else:
            response = await handler(request)
        if method == "HEAD":
            response.body = b""
        await response(scope, receive, send)


def door(path: str, handlers: Mapping[str, Handler], *, asked: bool = False, **told: str) -> Route:
    """Return the route of `path`, as `Door`; underscores in the names of `told` stand for hyphens."""
    fields = {name.replace("_", "-"): value for name, value in told.items()}
    return Route(path, Door(path, handlers, asked=asked, told=fields))
