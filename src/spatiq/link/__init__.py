"""Link description: file -> checked object -> frame layout."""

from spatiq.link.description import Link
from spatiq.link.loading import load_link, parse_link

__all__ = ["Link", "load_link", "parse_link"]
