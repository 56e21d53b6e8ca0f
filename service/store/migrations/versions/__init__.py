"""One file per change, never edited after a release."""
