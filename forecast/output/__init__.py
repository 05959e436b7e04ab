"""For people and other programs: charts, page, tables and netCDF from an Outlook."""
