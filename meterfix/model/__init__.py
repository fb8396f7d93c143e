"""What a site is: frozen, effective-dated, SI."""
