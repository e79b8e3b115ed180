"""Open data that Debian packages carry, read into sparse tables. None of it is kept here."""
