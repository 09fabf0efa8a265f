"""From one promised yield to the cheapest quality target for every step and supplier."""
