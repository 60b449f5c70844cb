"""One building and what its plant can give: arrays first, every model broadcasts over sites."""
