"""How agreement between scanners is told in a terminal."""
