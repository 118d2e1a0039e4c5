"""What people read: for now the summary that ends a compile."""
