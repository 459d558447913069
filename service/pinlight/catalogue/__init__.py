"""The team's catalogue: tables, names, the seed, editions. Only this package knows SQLAlchemy."""
