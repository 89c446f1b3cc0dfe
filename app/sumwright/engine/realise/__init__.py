"""From wanted weights to parts that can be bought, or are in the drawer."""
