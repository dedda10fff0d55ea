"""What is handed to people and programs: the report as JSON, CSV, page and line."""
