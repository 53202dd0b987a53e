"""Published methods that have never heard of files, sensors or pages."""
