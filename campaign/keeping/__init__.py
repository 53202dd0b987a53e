"""What is kept from one run to the next: values as bytes, and one file that holds them."""
