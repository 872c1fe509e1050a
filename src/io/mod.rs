//! Files to model and back. Every fault names file, line, column, what was found and what was
//! expected; readers collect faults rather than stop at the first.

pub mod campaign;
pub mod check;
pub mod claims;
pub mod dates;
pub mod ecsv_read;
pub mod ecsv_write;
pub mod fault;
pub mod files;
pub mod fits_read;
pub mod fits_write;
pub mod format;
pub mod format_error;
pub mod known;
pub mod lists;
pub mod number_text;
#[cfg(feature = "parquet")]
pub mod parquet_read;
#[cfg(feature = "parquet")]
pub mod parquet_write;
pub mod read_run;
pub mod result_tables;
pub mod rulings;
pub mod run_dir;
pub mod run_info;
pub mod table;
pub mod text_table;
pub mod truth_csv;
pub mod unit_text;
pub mod votable_read;
pub mod votable_write;
pub mod write_run;

mod columns;
mod delimited;
mod ecsv_list;
mod instrument;
mod kind;
mod one_table;
mod planned;
mod raw_list;
mod toml_table;
mod units;
