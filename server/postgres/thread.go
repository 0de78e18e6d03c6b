package postgres

import "runtime"

// lockThread keeps the goroutine on its thread for good.
func lockThread() { runtime.LockOSThread() }
