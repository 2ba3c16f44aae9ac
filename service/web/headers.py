"""Security headers of every response of the application: nothing is framed, sniffed or loaded from elsewhere.

That of an unexpected error, made outside every middleware, gets them in `problems.py`.
"""

from starlette.types import ASGIApp, Message, Receive, Scope, Send

POLICY = (
    "default-src 'none'; script-src 'self'; style-src 'self'; img-src 'self' data:; font-src 'self'; "
    "connect-src 'self'; form-action 'self'; base-uri 'none'; frame-ancestors 'none'"
)
HEADERS = (
    (b"content-security-policy", POLICY.encode()),
    (b"x-content-type-options", b"nosniff"),
    (b"x-frame-options", b"DENY"),
    (b"referrer-policy", b"no-referrer"),
    (b"cross-origin-opener-policy", b"same-origin"),
    (b"cross-origin-resource-policy", b"same-origin"),
)
NOT_KEPT = (b"cache-control", b"no-store")


class SecurityHeaders:
    """Adds them where the application has set none of its own."""

    def __init__(self, app: ASGIApp) -> None:
        self.app = app

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        """ASGI."""
        if scope["type"] != "http":
            await self.app(scope, receive, send)
            return

        async def send_with_headers(message: Message) -> None:
            if message["type"] == "http.response.start":
                given = list(message.get("headers", ()))
                names = {name.lower() for name, _ in given}
                message["headers"] = given + [one for one in (*HEADERS, NOT_KEPT) if one[0] not in names]
            await send(message)

        await self.app(scope, receive, send_with_headers)
