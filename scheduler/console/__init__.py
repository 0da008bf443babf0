"""The console: a local web page on which settings are moved and the plan follows."""
