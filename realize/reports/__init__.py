"""What people look at: pictures and tables. Drawing libraries are imported where they are used."""
