"""The board, the JSON API and their gate: read the ledger, compute nothing."""
