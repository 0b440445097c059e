package region_test

import (
	"fmt"
	"io"
	"net"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"testing"
	"time"
)

// patience bounds every wait that has no limit to prove.
const patience = 60 * time.Second

// node is one broker of the cluster, in a process of its own.
type node struct {
	name              string
	client, mesh, web int // ports: of the cluster's own protocol, between nodes, of MQTT
	process           *exec.Cmd
	log               string
}

type cluster struct{ nodes []*node }

// startCluster starts three nodes that keep their streams three times, and
// acknowledge what is on disk.
func startCluster(t *testing.T) *cluster {
	t.Helper()
	dir := t.TempDir()
	c := &cluster{}
	var routes []string
	for i := range 3 {
		n := &node{name: fmt.Sprint("node", i), client: freePort(t), mesh: freePort(t), web: freePort(t), log: filepath.Join(dir, fmt.Sprint("log", i))}
		c.nodes = append(c.nodes, n)
		routes = append(routes, fmt.Sprintf("nats://127.0.0.1:%d", n.mesh))
	}
	for i, n := range c.nodes {
		path := filepath.Join(dir, n.name+".conf")
		text := fmt.Sprintf(`
server_name: %s
listen: "127.0.0.1:%d"
log_file: %q
jetstream { store_dir: %q, max_file_store: 1G, max_memory_store: 64M, sync_interval: always }
cluster { name: region, listen: "127.0.0.1:%d", routes: [%s] }
# One message at a time to each reader: what is sent again keeps its place.
mqtt { listen: "127.0.0.1:%d", stream_replicas: 3, ack_wait: "5s", max_ack_pending: 1 }
`, n.name, n.client, n.log, filepath.Join(dir, fmt.Sprint("store", i)), n.mesh, strings.Join(routes, ", "), n.web)
		if err := os.WriteFile(path, []byte(text), 0o600); err != nil {
			t.Fatal(err)
		}
		n.process = exec.Command(os.Args[0])
		n.process.Env = append(os.Environ(), nodeVariable+"="+path)
		n.process.Stderr = os.Stderr
		if err := n.process.Start(); err != nil {
			t.Fatal(err)
		}
		t.Cleanup(func() {
			_ = n.process.Process.Kill() // it may have been killed already
			_ = n.process.Wait()
			if t.Failed() {
				text, _ := os.ReadFile(n.log)
				t.Logf("%s: ...%s", n.name, text[max(0, len(text)-3000):])
			}
		})
	}
	for _, n := range c.nodes {
		await(t, n.name+" to listen", func() bool {
			conn, err := net.DialTimeout("tcp", fmt.Sprintf("127.0.0.1:%d", n.web), time.Second)
			if err != nil {
				return false
			}
			return conn.Close() == nil
		})
	}
	return c
}

// kill ends a node as a loss of power would: it says goodbye to nobody.
func (n *node) kill(t *testing.T) {
	t.Helper()
	if err := n.process.Process.Kill(); err != nil {
		t.Fatal(err)
	}
}

// front is an address that moves: it hands each connection to the node of this
// number while that one answers, else to the next that does.
func (c *cluster) front(t *testing.T, preferred int) (url string) {
	t.Helper()
	l, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { l.Close() })
	go func() {
		for {
			conn, err := l.Accept()
			if err != nil {
				return // closed with the test
			}
			go c.pass(conn, preferred)
		}
	}()
	return "mqtt://" + l.Addr().String()
}

func (c *cluster) pass(in net.Conn, preferred int) {
	defer in.Close()
	for i := range c.nodes {
		n := c.nodes[(preferred+i)%len(c.nodes)]
		out, err := net.DialTimeout("tcp", fmt.Sprintf("127.0.0.1:%d", n.web), time.Second)
		if err != nil {
			continue
		}
		defer out.Close()
		ended := make(chan struct{}, 2)
		for _, way := range [][2]net.Conn{{in, out}, {out, in}} {
			go func() {
				_, _ = io.Copy(way[0], way[1]) // either side may go at any time
				ended <- struct{}{}
			}()
		}
		<-ended
		return
	}
}

func freePort(t *testing.T) int {
	t.Helper()
	l, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	defer l.Close()
	return l.Addr().(*net.TCPAddr).Port
}

// await waits until something holds.
func await(t *testing.T, what string, ok func() bool) {
	t.Helper()
	deadline := time.NewTimer(patience)
	defer deadline.Stop()
	look := time.NewTicker(50 * time.Millisecond)
	defer look.Stop()
	for !ok() {
		select {
		case <-deadline.C:
			t.Fatalf("waited %v for %s", patience, what)
		case <-look.C:
		}
	}
}
