from contextlib import contextmanager
import time
class Profile:
    def __init__(self):
        self.seconds={}
        self.counters={}
    @contextmanager
    def phase(self,name):
        t=time.perf_counter()
        yield
        self.seconds[name]=self.seconds.get(name,0)+time.perf_counter()-t
    def take(self,table,rows,scores,bits):
        self.seconds|={"first scores":rows.seconds_first_scores,"picks":scores.seconds_picks,"row updates":rows.seconds_updates,"heap":scores.seconds_heap}
        self.counters=rows.counters|scores.counters
        self.counters["loud"]=len(rows.loud); self.counters["loud_nnz"]=len(rows.loud_of)
        self.table_bytes=table.columns.n_bytes+rows.n_bytes
class Release:
    def __init__(self,plan,features,coefficients,intercept,rehearsal,names,profile):
        self.__dict__.update(locals())
