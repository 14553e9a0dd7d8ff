"""Pages of HTML that need nothing but a browser: no network, no script."""

from oakum.report.html.pages import audit_page, history_page

__all__ = ["audit_page", "history_page"]
