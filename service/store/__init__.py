"""What the service keeps: rows in a database (`tables`, `scans`, `jobs`, ...) and files (`files`)."""
