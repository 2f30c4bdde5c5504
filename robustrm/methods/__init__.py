"""One file for each test; nothing is re-exported here."""
