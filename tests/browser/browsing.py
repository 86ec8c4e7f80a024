"""A page in a browser, with everything it logs and asks for."""

from __future__ import annotations

from pathlib import Path

from playwright.sync_api import Page


class Opened:
    """A page with what it logged and asked for."""

    def __init__(self, page: Page) -> None:
        self.page = page
        self.errors: list[str] = []
        self.requests: list[str] = []
        page.on("console", lambda message: self._log(message.type, message.text))
        page.on("pageerror", lambda error: self.errors.append(str(error)))
        page.on("request", lambda request: self.requests.append(request.url))
        page.on("dialog", lambda dialog: self.errors.append(f"dialog {dialog.message}"))

    def _log(self, kind: str, text: str) -> None:
        if kind in ("error", "warning"):
            self.errors.append(text)

    def open(self, path: Path) -> Page:
        self.page.goto(path.as_uri())
        self.page.wait_for_function("window.Bokeh && Bokeh.documents.length > 0 && Bokeh.documents[0].is_idle")
        return self.page
