mod interior;
mod star;
