package postgres

// SocketFolder is the folder of the socket of the cluster in dir.
func SocketFolder(dir string) string { return socketFolder(dir) }
