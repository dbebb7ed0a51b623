"""Tables, migrations, the one writer and the queries."""
