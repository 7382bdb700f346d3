mod mock;
