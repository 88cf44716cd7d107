"""Bodies and links, each nothing but its table of terms."""
