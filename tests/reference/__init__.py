"""Published figures to test against, beside their citations."""
