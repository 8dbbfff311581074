"""Data that the library, the command line, the tests and the phantoms share; no code lives here."""
