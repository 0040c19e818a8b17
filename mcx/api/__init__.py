"""One function for each verb: files and wishes in, a frozen result out.

The only folder that knows every layer. `InputError` is raised once, with every fault of all documents; `RequestError`
for options without meaning; `Refusal` for what cannot be computed rightly. What is heavy is imported inside the verbs,
after the documents are known to be sound.
"""

from mcx.api.comparing import methods
from mcx.api.library import blank, definition, payoffs, schema
from mcx.api.pricing import price
from mcx.api.reading import readback
from mcx.api.replaying import replay
from mcx.api.sensitivities import greeks
from mcx.api.verifying import verify

__all__ = ["blank", "definition", "greeks", "methods", "payoffs", "price", "readback", "replay", "schema", "verify"]
