package access

import "os"

// sameOwner has nothing to do here: a file takes over the rights of its
// directory.
func sameOwner(*os.File, string) error { return nil }
