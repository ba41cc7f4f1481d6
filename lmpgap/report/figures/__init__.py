"""Functions that return plotly figures for the view model; none shows or writes anything."""
