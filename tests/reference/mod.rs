mod hydrogen;
mod stark;
