"""Who knows the secret: the login, and the cookie that says that somebody has logged in.

The cookie is signed with a key that is made of the secret, so a login outlives a restart of the
page and ends with the secret. Guesses are slow: a few wrong ones a minute from one address, and
from a limited number of addresses.
"""

from __future__ import annotations

import hashlib
import hmac
import time
from collections import deque
from collections.abc import Callable
from typing import Literal

from tornado.httputil import HTTPServerRequest
from tornado.web import RequestHandler, create_signed_value, decode_signed_value

from dashboard.page.html import div, element

LASTS_DAYS = 7
MOST_WRONG, WITHIN_S = 5, 60.0
MOST_PEERS = 256

Answer = Literal["right", "wrong", "wait"]


class Logins:
    """Decides about secrets and cookies; knows no server.

    ``port`` is part of the cookie's name, since browsers keep one jar for all ports of a host.
    """

    def __init__(
        self, secret: str, port: int, clock: Callable[[], float] = time.monotonic
    ) -> None:
        self.cookie = f"rampside_{port}"
        self._digest = _digest(secret)
        self._key = hmac.new(secret.encode(), b"rampside page login", hashlib.sha256).hexdigest()
        self._clock = clock
        self._wrong: dict[str, deque[float]] = {}

    def try_secret(self, peer: str, given: str) -> Answer:
        """Whether somebody at an address knows the secret; "wait" does not even look."""
        now = self._clock()
        self._forget(now)
        guesses = self._wrong.get(peer, ())
        if len(guesses) >= MOST_WRONG or (not guesses and len(self._wrong) >= MOST_PEERS):
            return "wait"
        if hmac.compare_digest(_digest(given.strip()), self._digest):
            return "right"
        self._wrong.setdefault(peer, deque()).append(now)
        return "wrong"

    def new_cookie(self) -> str:
        """What the cookie of somebody who has logged in holds."""
        return create_signed_value(self._key, self.cookie, "in").decode()

    def is_in(self, request: HTTPServerRequest) -> bool:
        """Whether a request comes from somebody who has logged in."""
        morsel = request.cookies.get(self.cookie)
        if morsel is None:
            return False
        value = decode_signed_value(
            self._key, self.cookie, morsel.value, max_age_days=LASTS_DAYS, min_version=2
        )
        return value == b"in"

    def _forget(self, now: float) -> None:
        for peer in list(self._wrong):
            guesses = self._wrong[peer]
            while guesses and guesses[0] <= now - WITHIN_S:
                guesses.popleft()
            if not guesses:
                del self._wrong[peer]


class LoginHandler(RequestHandler):
    """Asks for the secret, and lets in who knows it."""

    def initialize(self, logins: Logins) -> None:
        """Called with the decisions."""
        self._logins = logins

    def get(self) -> None:
        """Ask."""
        self._ask("")

    def post(self) -> None:
        """Look at what was given."""
        given = self.get_body_argument("secret", "", strip=False)
        answer = self._logins.try_secret(self.request.remote_ip or "", given)
        if answer == "right":
            self.set_cookie(
                self._logins.cookie, self._logins.new_cookie(), httponly=True, samesite="Strict",
                path="/", max_age=LASTS_DAYS * 24 * 3600,
            )  # fmt: skip
            self.redirect("/", status=303)
        elif answer == "wrong":
            self.set_status(403)
            self._ask("That is not the secret.")
        else:
            self.set_status(429)
            self.set_header("Retry-After", f"{WITHIN_S:.0f}")
            self._ask("Too many wrong guesses: wait a minute, then try again.")

    def _ask(self, why: str) -> None:
        field = element(
            "input", type="password", name="secret", aria_label="secret", autocomplete="off",
            autofocus="autofocus", required="required",
        )  # fmt: skip
        form = element("form", field, element("button", "Log in"), method="post", action="/login")
        words = div("words", "The secret of this page stands in a file on the computer that serves it.")
        self.write(_PAGE.format(body=div("box", element("h1", "rampside"), words, form, div("why", why))))


_PAGE = """<!DOCTYPE html>
<html lang="en"><head><meta charset="utf-8"><title>rampside</title>
<meta name="viewport" content="width=device-width, initial-scale=1">
<style>
body {{ font: 16px sans-serif; background: #f4f4f1; color: #1b2227; }}
.box {{ max-width: 340px; margin: 18vh auto 0; padding: 24px; background: #fff;
  border: 1px solid #dcddd7; border-radius: 8px; }}
h1 {{ font-size: 22px; margin: 0 0 8px; }}
.words {{ color: #59636a; margin-bottom: 14px; }}
form {{ display: flex; gap: 8px; }}
input {{ flex: 1; min-width: 0; font: inherit; padding: 6px 8px; }}
button {{ font: inherit; padding: 6px 14px; }}
.why {{ color: #a11d1a; margin-top: 12px; }}
</style></head><body>{body}</body></html>
"""


def _digest(text: str) -> bytes:
    return hashlib.sha256(text.encode(errors="surrogatepass")).digest()
