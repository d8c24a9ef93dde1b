mod hydrogen;
mod stark;
mod stark_tables;
