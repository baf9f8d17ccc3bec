"""How a browser shows that it was given the token: a cookie that reads and never writes.

The token is typed once, sent in the body of a POST, and answered with a cookie that scripts cannot see and other
sites cannot use. The cookie holds a value derived from the token, so that neither the browser nor a log holds the
token itself, and it opens reading requests only: data and changes always need the token.
"""

from __future__ import annotations

import hashlib
import hmac
from http.cookies import CookieError, SimpleCookie

READING_METHODS = frozenset({"GET", "HEAD"})
# A page on the wall is left alone for weeks; after this long somebody types the token again.
COOKIE_SECONDS = 30 * 24 * 3600
_PURPOSE_NAME, _PURPOSE_VALUE = b"slackwater page, cookie name", b"slackwater page, reading"


class Session:
    """Makes and recognises the cookie for one token."""

    def __init__(self, token: bytes) -> None:
        self._token = token
        # Cookies do not tell ports apart: two services on one machine must not overwrite each other's.
        self.name = f"slackwater_page_{_derived(token, _PURPOSE_NAME)[:8]}"
        self._value = _derived(token, _PURPOSE_VALUE)

    def cookie(self, given: str, secure: bool) -> str | None:
        """The Set-Cookie line for the right token, None for a wrong one; compared in constant time."""
        if not hmac.compare_digest(given.strip().encode(), self._token):
            return None
        ending = "; Secure" if secure else ""
        return f"{self.name}={self._value}; Max-Age={COOKIE_SECONDS}; Path=/; HttpOnly; SameSite=Strict{ending}"

    def opens(self, method: str, cookie_header: str) -> bool:
        """Whether these cookies allow this request."""
        if method not in READING_METHODS:
            return False
        try:
            morsel = SimpleCookie(cookie_header).get(self.name)
        except CookieError:
            return False
        return morsel is not None and hmac.compare_digest(morsel.value.encode(), self._value.encode())


def _derived(token: bytes, purpose: bytes) -> str:
    return hmac.new(token, purpose, hashlib.sha256).hexdigest()
