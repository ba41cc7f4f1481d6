"""What the analyst brings: tables, settings, and the per-unit network and intervals made from them."""
