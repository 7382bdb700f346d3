mod draft;
mod mock;
