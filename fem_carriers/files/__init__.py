"""Fields and tables on disk, for any viewer and any spreadsheet."""
