"""The summary as one page of HTML that needs nothing from elsewhere."""
