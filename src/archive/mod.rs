//! What is done (ledger) and what was found (catalogue).
