"""What came out: the dataset, its scaling, its figures and its report."""
