"""The pages: HTML and charts for people. This room knows HTTP and the look, and never imports api or jobs."""
