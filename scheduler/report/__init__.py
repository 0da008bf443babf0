"""Charts of a plan, and one offline page that holds them all."""
