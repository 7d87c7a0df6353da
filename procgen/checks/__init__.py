"""The validator: does an ensemble have the exact behaviour that its spec states? See `validate.validate`."""
