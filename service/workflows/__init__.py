"""What users do, one function per act; no Flask, no SQL. The actor comes first and is checked here."""
