"""The pages: HTML and charts for people, over procedures and storage; this room knows HTTP and the look, and never imports api or jobs."""
