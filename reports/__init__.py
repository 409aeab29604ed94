"""What people read: figures, pages, mail."""
