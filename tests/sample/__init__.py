"""The invented retail market behind `sample_parquet/`: its generator and the truth it was made from."""
