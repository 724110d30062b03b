from tests.web.test_project import *
from tests.web.conftest import *
def test_q(browser, fitted):
    with CaptureQueriesContext(connection) as q:
        html = html_of(browser)
    for x in q: print(x["sql"][:170].replace("\n"," ")); 
    print(len(q), len(html))
    import time; t=time.perf_counter(); html_of(browser); print(time.perf_counter()-t)
    assert 0
