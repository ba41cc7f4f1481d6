"""Two price sets side by side: differences, drivers, posted prices."""
