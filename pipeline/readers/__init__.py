"""From files to parsed records, one format a file."""
