"""Files that people bring: what reads clean, and every way in which one is refused."""
