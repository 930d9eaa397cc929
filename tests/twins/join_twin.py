"""The join of late outcomes once more, plainly: all events in, sorted, gone through one by one."""

from collections import Counter


class JoinTwin:
    """`messages`: (time, partition, offset, id); `outcomes`: (time, partition, offset, id, label).

    `events` before `until`, in order: messages that arrive, (time, 0, partition, offset, -1, whether it is
    repeated), and those that are released, (time, 1, partition, offset, label, whether it expired).
    """

    def __init__(self, messages, outcomes, until, *, wait, when_absent, on_conflict, allow_early):
        self.wait, self.when_absent = wait, when_absent
        self.on_conflict, self.allow_early = on_conflict, allow_early
        self.counts, self.events = Counter(), []
        self.holders, self.early, self.delays = {}, {}, []
        events = [(m[0], 0, *m[1:]) for m in messages] + [(o[0], 2, *o[1:]) for o in outcomes]
        for event in sorted(e for e in events if e[0] < until):
            self.expire_before(event[0])
            if event[1] == 0:
                self.message(*event[0:1], *event[2:])
            else:
                self.outcome(*event[0:1], *event[2:])
        self.expire_before(until)
        self.events.sort()

    def expire_before(self, time):
        for ident, (at, _) in list(self.early.items()):
            if at + self.wait < time:
                del self.early[ident]
                self.counts["orphans"] += 1
        for holder in self.holders.values():
            if holder["state"] == "waiting" and holder["time"] + self.wait < time:
                self.end(holder)

    def end(self, holder):
        due = holder["time"] + self.wait
        if holder["contradicted"]:
            holder["state"] = "discarded"
            self.counts["discarded"] += 1
        elif holder["label"] is not None:
            holder["state"] = "joined"
            self.counts["joined"] += 1
            self.events.append((due, 1, *holder["place"], holder["label"], False))
        else:
            holder["state"] = "expired"
            self.counts["expired"] += 1
            if self.when_absent == "negative":
                self.events.append((due, 1, *holder["place"], 0, True))

    def message(self, time, partition, offset, ident):
        self.counts["messages"] += 1
        holder = self.holders.get(ident)
        repeated = holder is not None and time <= holder["time"] + 2 * self.wait
        self.events.append((time, 0, partition, offset, -1, repeated))
        if repeated:
            self.counts["repeated_messages"] += 1
            return
        self.holders[ident] = {
            "time": time,
            "place": (partition, offset),
            "state": "waiting",
            "label": None,
            "contradicted": False,
        }
        if ident in self.early:
            at, label = self.early.pop(ident)
            self.counts["early"] += 1
            self.take(self.holders[ident], at, label)

    def take(self, holder, time, label):
        if label == "differing":
            holder["contradicted"], holder["label"] = True, 0
            return
        holder["label"] = label
        if label:
            self.delays.append(max(0, time - holder["time"]))
        if self.on_conflict == "first":
            holder["state"] = "joined"
            self.counts["joined"] += 1
            self.events.append((max(time, holder["time"]), 1, *holder["place"], label, False))

    def outcome(self, time, partition, offset, ident, label):
        self.counts["outcomes"] += 1
        holder = self.holders.get(ident)
        if holder is None or time > holder["time"] + 2 * self.wait:
            self.without_message(time, ident, label)
        elif holder["label"] is None:
            if time <= holder["time"] + self.wait:
                self.take(holder, time, label)
            else:
                holder["label"] = label
                self.counts["late"] += 1
                if label:
                    self.delays.append(time - holder["time"])
        elif holder["label"] == label:
            self.counts["repeated"] += 1
        else:
            self.counts["conflicting"] += 1
            if holder["state"] == "waiting" and not holder["contradicted"]:
                if self.on_conflict == "last":
                    holder["label"] = label
                else:
                    holder["contradicted"] = True

    def without_message(self, time, ident, label):
        if not self.allow_early:
            self.counts["orphans"] += 1
        elif ident not in self.early:
            self.early[ident] = (time, label)
        elif self.early[ident][1] == label:
            self.counts["repeated"] += 1
        else:
            self.counts["conflicting"] += 1
            if self.on_conflict == "last":
                self.early[ident] = (time, label)
            elif self.on_conflict == "reject":
                self.early[ident] = (self.early[ident][0], "differing")
