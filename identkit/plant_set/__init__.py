"""The plant set file: schema, loading and saving, frequency response, sampling and reach."""
