"""Tests of what is printed on the page and what follows from the print alone."""
