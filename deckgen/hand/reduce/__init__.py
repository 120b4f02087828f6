"""Networks reduced to what one transistor sees, read from the graph alone: names and order play no part."""
