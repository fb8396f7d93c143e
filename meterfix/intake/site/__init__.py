"""The site file: TOML in, a frozen model out, or every mistake at once."""

from meterfix.intake.site.build import read_site, site_from_text
from meterfix.intake.site.findings import where
from meterfix.intake.site.secrets import anchored, resolve_secrets
from meterfix.intake.site.tables import schema

__all__ = ["anchored", "read_site", "resolve_secrets", "schema", "site_from_text", "where"]
