"""Views: Datasets and decisions in, pictures, terminal text and files for people out."""
