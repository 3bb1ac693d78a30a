"""The journal: facts as they happened, findings beside them, sealed files for tests that ended."""
