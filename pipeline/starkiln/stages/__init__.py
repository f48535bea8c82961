"""The stages from input rows to catalogue rows, each a function: table in, table out."""
