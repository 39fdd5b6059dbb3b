"""The command line: hands records from the engine to the store and to the report."""
