"""The format as data: FORMAT.md, the JSON Schemas of the file's outline, of each Jastrow form and of the report."""
