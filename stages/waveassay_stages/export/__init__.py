"""What leaves the pipeline: tables and figures. The engine writes the files."""
