"""Tests: one file per source file, and checks of the whole against things outside."""
