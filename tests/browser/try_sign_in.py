"""Signs in really: `python tests/browser/try_sign_in.py`, with Authlib and httpx installed. Not part of the tests,
which go without them.

A tiny OpenID Connect provider of its own answers on this machine; a browser signs in, reloads, and signs out; a
second browser stays outside.
"""

from __future__ import annotations

import importlib.util
import json
import tempfile
import threading
import time
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer
from pathlib import Path
from typing import Any
from urllib.parse import parse_qs, urlencode, urlsplit

from joserfc import jwt
from joserfc.jwk import RSAKey
from playwright.sync_api import sync_playwright

spec = importlib.util.spec_from_file_location("browser_tools", Path(__file__).with_name("conftest.py"))
assert spec is not None
assert spec.loader is not None
tools: Any = importlib.util.module_from_spec(spec)
spec.loader.exec_module(tools)

KEY = RSAKey.generate_key(2048, {"kid": "one", "alg": "RS256", "use": "sig"})
ASKED: dict[str, str] = {}


class Provider(BaseHTTPRequestHandler):
    """Says yes to everybody."""

    def log_message(self, *_: object) -> None:
        pass

    def tell(self, data: dict[str, Any]) -> None:
        body = json.dumps(data).encode()
        self.send_response(200)
        self.send_header("Content-Type", "application/json")
        self.send_header("Content-Length", str(len(body)))
        self.end_headers()
        self.wfile.write(body)

    @property
    def here(self) -> str:
        return f"http://127.0.0.1:{self.server.server_address[1]}"

    def do_GET(self) -> None:
        url = urlsplit(self.path)
        asked = {k: v[0] for k, v in parse_qs(url.query).items()}
        if url.path == "/authorize":
            ASKED["nonce"] = asked.get("nonce", "")
            back = urlencode({"code": "yes", "state": asked["state"]})
            self.send_response(302)
            self.send_header("Location", f"{asked['redirect_uri']}?{back}")
            self.end_headers()
        elif url.path == "/keys":
            self.tell({"keys": [KEY.as_dict(private=False)]})
        else:
            ways = {"authorization_endpoint": "authorize", "token_endpoint": "token", "jwks_uri": "keys"}
            self.tell(
                {
                    "issuer": self.here,
                    "response_types_supported": ["code"],
                    "subject_types_supported": ["public"],
                    "id_token_signing_alg_values_supported": ["RS256"],
                    **{name: f"{self.here}/{way}" for name, way in ways.items()},
                }
            )

    def do_POST(self) -> None:
        self.rfile.read(int(self.headers.get("Content-Length", 0)))
        now = int(time.time())
        said = {"iss": self.here, "sub": "1", "aud": "form", "iat": now, "exp": now + 300, "nonce": ASKED["nonce"]}
        token = jwt.encode({"alg": "RS256", "kid": "one"}, said, KEY)
        self.tell({"access_token": "x", "token_type": "Bearer", "expires_in": 300, "id_token": token})


def main() -> None:
    provider = ThreadingHTTPServer(("127.0.0.1", 0), Provider)
    threading.Thread(target=provider.serve_forever, daemon=True).start()
    port = tools.free_port()
    tools.free_port = lambda: port
    with tempfile.TemporaryDirectory() as folder, sync_playwright() as p:
        secrets = Path(folder) / ".streamlit" / "secrets.toml"
        secrets.parent.mkdir()
        secrets.write_text(
            f'[auth]\nredirect_uri = "http://127.0.0.1:{port}/oauth2callback"\n'
            'cookie_secret = "a long random text, a long random text"\nclient_id = "form"\nclient_secret = "form"\n'
            f'server_metadata_url = "http://127.0.0.1:{provider.server_address[1]}/.well-known/openid-configuration"\n',
            encoding="utf-8",
        )
        server, address = tools.start_server(Path(folder) / "log.txt", env={"HOME": folder})
        browser = p.chromium.launch(executable_path=tools.CHROMIUM, args=tools.FLAGS, headless=True)
        try:
            page, other = (browser.new_context().new_page() for _ in range(2))
            for one in (page, other):
                one.goto(address)
                one.get_by_role("button", name="Sign in").wait_for()
            print("before sign-in, fields:", page.locator("input").count())
            page.get_by_role("button", name="Sign in").click()
            page.get_by_label("Why was the level drawn").wait_for()
            print("after sign-in, the form is shown; another browser has fields:", other.locator("input").count())
            page.reload()
            page.get_by_label("Why was the level drawn").wait_for()
            print("after reload, the form is shown and empty")
            page.get_by_text("Open a demonstration or a case file").click()
            page.get_by_role("button", name="Sign out").click()
            page.get_by_role("button", name="Sign in").wait_for()
            print("after sign-out, fields:", page.locator("input").count())
        finally:
            browser.close()
            server.terminate()


if __name__ == "__main__":
    main()
