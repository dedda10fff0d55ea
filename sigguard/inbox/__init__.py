"""A folder in which recordings arrive: noticing them whole, checking each once, and the ledger of it all."""
