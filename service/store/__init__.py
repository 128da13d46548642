"""Where everything is kept: tables, migrations, unit of work, the single writer, verification."""
