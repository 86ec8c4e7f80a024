"""What people get to see: tables, plots, progress and cautions. The only package that draws."""
