"""Cases of the SQL files: a folder a query, a folder a case."""
