"""Every byte read or written: deliveries, tables, the ledger.

Beside `queries`, the only layer that imports DuckDB.
"""
