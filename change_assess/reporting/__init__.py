"""What people read: figures, tables, reports and the words in them."""
