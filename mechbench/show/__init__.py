"""What people and programs see: records, tables and words."""
