"""The revisions of the database, one a file; a revision that was released is never changed."""
