mod interior;
