"""What the browser is told to allow, and how a form proves that it came from a page of ours."""

from __future__ import annotations

import hashlib
import hmac
import secrets
from urllib.parse import urlsplit

from fastapi import Request
from starlette.datastructures import MutableHeaders
from starlette.types import ASGIApp, Message, Receive, Scope, Send

COOKIE = "softsensor_form"
POLICY = "; ".join(
    (
        "default-src 'none'",
        "script-src 'self'",
        "style-src 'self' 'unsafe-inline'",  # the charts make their style elements as they are drawn
        "img-src 'self' data:",
        "connect-src 'self'",
        "form-action 'self'",
        "frame-ancestors 'none'",
        "base-uri 'none'",
    )
)
HEADERS = {
    "Content-Security-Policy": POLICY,
    "X-Content-Type-Options": "nosniff",
    "X-Frame-Options": "DENY",
    "Referrer-Policy": "same-origin",
    "Cross-Origin-Opener-Policy": "same-origin",
    "Cross-Origin-Resource-Policy": "same-origin",
}
STATIC_AGE = "private, max-age=3600"


class ProtectiveHeaders:
    """Puts the headers on every answer, streams included."""

    def __init__(self, app: ASGIApp) -> None:
        self._app = app

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        if scope["type"] != "http":
            await self._app(scope, receive, send)
            return
        age = STATIC_AGE if scope["path"].startswith("/static/") else "no-store"

        async def send_with_headers(message: Message) -> None:
            if message["type"] == "http.response.start":
                headers = MutableHeaders(scope=message)
                for name, value in HEADERS.items():
                    headers[name] = value
                headers["Cache-Control"] = age
            await send(message)

        await self._app(scope, receive, send_with_headers)


class FormGuard:
    """Tells forms of our own pages from forged ones.

    A page sets a random cookie (SameSite=Strict) and carries, in each form, the HMAC of that cookie under a key that
    lives as long as the process. Another site can neither read the cookie nor make the HMAC. Besides, the browser's
    own word on where the form came from (Sec-Fetch-Site, else Origin) must say: from here.
    """

    def __init__(self) -> None:
        self._key = secrets.token_bytes(32)

    def cookie_of(self, request: Request) -> str:
        """The browser's cookie, or a new one."""
        return request.cookies.get(COOKIE) or secrets.token_urlsafe(24)

    def token_for(self, cookie: str) -> str:
        """What a form for the browser with this cookie carries."""
        return hmac.new(self._key, cookie.encode(), hashlib.sha256).hexdigest()

    def refusal(self, request: Request, token: str) -> str | None:
        """Why the form is refused, in words; None where it is ours."""
        if not self._same_origin(request):
            return "The form was sent from another site. Open this program's own page and use the form there."
        cookie = request.cookies.get(COOKIE, "")
        if not cookie or not hmac.compare_digest(self.token_for(cookie).encode(), token.encode()):
            return (
                "The form is from before the program last started, or cookies are blocked. "
                "Open the page again and repeat what you entered; nothing was changed."
            )
        return None

    @staticmethod
    def _same_origin(request: Request) -> bool:
        said = request.headers.get("sec-fetch-site")
        if said is not None and said != "same-origin":
            return False
        origin = request.headers.get("origin")
        if origin is None:
            return said == "same-origin"
        return urlsplit(origin).netloc == request.headers.get("host")
