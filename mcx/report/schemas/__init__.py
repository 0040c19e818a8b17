"""JSON schemas (draft 7) of the documents, so that an editor completes and checks them while they are typed.

They are made from the readers' own lists of keys and words and from the terms of each definition. A schema knows the
shape of a document; whether dates, names and numbers fit together is for the loader to say.
"""
