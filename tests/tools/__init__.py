"""Measuring tools and rigs that the tests of liveres stand on; each has tests of its own here."""
