"""One file per revision; a released revision is never edited."""
