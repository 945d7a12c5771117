"""The rules of the trade, checked without clock, web or database."""
