"""Texts of the archive that are no pages: Markdown and plain text from templates, nothing escaped."""

from __future__ import annotations

from campaign.pages.render import environment


def render_text(template: str, **values: object) -> bytes:
    """Return the text of ``site_templates/sealed/TEMPLATE`` with *values*, as UTF-8.

    An undefined name is an error. The text is for humans and is never shown as HTML by this program.
    """
    plain = environment().overlay(autoescape=False)
    return plain.get_template(f"sealed/{template}").render(values).encode("utf-8")
