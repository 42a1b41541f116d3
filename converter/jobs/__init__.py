"""Jobs: plain functions from drawings and settings to records; no command line here."""
