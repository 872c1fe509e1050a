//! Text and tables to model and back; errors with file, line, column and value.

pub mod ecsv_read;
pub mod ecsv_write;
pub mod number_text;
pub mod result_tables;
pub mod run_dir;
pub mod run_info;
pub mod table;
pub mod unit_text;
