"""The input and output tables: one file per table, labels and units live here and stop here."""
