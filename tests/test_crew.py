"""Who does the work: the same results whoever does, bounded, and closed to other users of the machine."""

import urllib.error
import urllib.request

import psutil
import pytest

from hindlight.crew import InProcess, assembled


def results(crew, jobs):
    """The results of pow() on the jobs, in their order."""
    found = {}
    crew.run(pow, jobs, found.__setitem__)
    return [found[number] for number in range(len(jobs))]


def test_small_work_is_done_in_this_process():
    """Without a number of workers, small work starts no cluster."""
    with assembled(None, None, is_small=True) as crew:
        assert isinstance(crew, InProcess)
        assert results(crew, [(2, 3), (3, 2)]) == [8, 9]


@pytest.fixture(scope="module")
def cluster():
    """A local cluster of two processes."""
    with assembled(2, None, is_small=False) as crew:
        yield crew


def test_a_cluster_gives_the_same_results(cluster):
    """Many more jobs than may be under way at once all arrive, by number."""
    jobs = [(n, 2) for n in range(100)]
    assert results(cluster, jobs) == [n * n for n in range(100)]


def test_what_a_job_raises_arrives(cluster):
    """An error in a job is raised here, not lost."""
    with pytest.raises(TypeError):
        results(cluster, [("a", 2)])


def test_a_local_cluster_is_closed_to_others(cluster):
    """Every open port is on loopback, speaks TLS or serves nothing: no other user can join or look on."""
    me = psutil.Process()
    processes = [me, *me.children(recursive=True)]
    open_ports = [c.laddr for p in processes for c in p.net_connections(kind="inet") if c.status == "LISTEN"]
    assert len(open_ports) >= 3
    served = 0
    for place in open_ports:
        assert place.ip == "127.0.0.1"
        try:
            with urllib.request.urlopen(f"http://127.0.0.1:{place.port}/info/main/workers.html", timeout=1) as answer:
                served += answer.status == 200
        except (urllib.error.URLError, OSError, ValueError):
            continue
    assert served == 0
