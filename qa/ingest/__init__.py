"""Log files of any names and units, turned into canonical logs."""
