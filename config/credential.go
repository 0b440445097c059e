package config

import (
	"os"
	"path/filepath"
	"strings"
)

// CredentialsVariable is the environment variable with which a service manager
// says where the files of LoadCredential are (systemd.exec(5), CREDENTIALS).
const CredentialsVariable = "CREDENTIALS_DIRECTORY"

// secretPath is the path of a file that the configuration names, as the
// program opens it. It may begin with ${CREDENTIALS_DIRECTORY}/: no other
// variable is known, so that what a file says depends on the file alone.
func (t *table) secretPath(name, path string) (full string, ok bool) {
	rest, inBraces := strings.CutPrefix(path, "${")
	if !inBraces {
		return t.resolve(path), true
	}
	variable, file, closed := strings.Cut(rest, "}/")
	if !closed || variable != CredentialsVariable || !filepath.IsLocal(file) {
		t.blame(t.key(name), path, "write ${"+CredentialsVariable+"}/ and the name of a credential, or a path",
			"this is the only variable that a path may begin with")
		return "", false
	}
	dir := os.Getenv(CredentialsVariable)
	if !filepath.IsAbs(dir) {
		t.blame(t.key(name), path, "let the service load the file (LoadCredential="+file+":PATH in its unit); by hand, set "+
			CredentialsVariable+" to the directory that holds it", CredentialsVariable+" is not set")
		return "", false
	}
	return filepath.Join(dir, file), true
}
