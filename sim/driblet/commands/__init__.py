"""The command line: parsing, printing and exit statuses live here and nowhere below."""
