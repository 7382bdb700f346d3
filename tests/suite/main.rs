//! All integration tests in one binary: linking polars once is enough.

mod storage;
